"""What slow-ratio says about lines that are steep, and about entries that a strict deflation test keeps."""

from __future__ import annotations

import numpy as np
import pytest

import schurbench as sb
from schurbench.measures import ULP


def clement(n: int, diagonal: float) -> np.ndarray:
    """Clement's matrix, symmetric form: eigenvalues ±(n−1), ±(n−3), … (P. A. Clement 1959).

    Its diagonal is zero; here it is tiny, so that the default test holds entries against it.
    """
    off = np.sqrt(np.arange(1.0, n) * np.arange(n - 1.0, 0.0, -1.0))
    return np.diag(off, 1) + np.diag(off, -1) + diagonal * np.diag(np.arange(n) - (n - 1) / 2)


def test_an_entry_kept_below_rounding_is_said_to_be_kept() -> None:
    # Without a shift the block of ±1 parts from that of ±3 at a rate of 1/3. The diagonal entries beside its
    # corner are so small that the default test asks for decades more.
    run = sb.iterate(clement(20, 1e-20), strategy="zero")
    finding = sb.diagnose(run).findings[0]
    assert (finding.cause, run.stop.reason) == ("slow-ratio", "limit")
    assert finding.evidence["measured_decay_per_sweep"] == pytest.approx(1 / 3, rel=1e-6)
    below = sum(float(run.subdiagonal(k)[17]) < ULP * run.norm for k in range(len(run.steps) + 1))
    assert finding.evidence["sweeps_below_it"] == pytest.approx(below, abs=2)
    assert "kept it because the diagonal entries beside it are small" in finding.statement


def test_remedy_for_a_kept_entry_helps_where_the_shifts_are_good() -> None:
    run = sb.iterate(clement(20, 1e-100), strategy="francis", exceptional=False)
    finding = sb.diagnose(run, try_remedies=True).findings[0]
    assert finding.cause == "slow-ratio"
    assert finding.remedy is not None
    assert finding.remedy.settings["deflation"] == "norm"
    assert finding.remedy.result is not None
    assert finding.remedy.result.helped
    after = finding.remedy.run()
    np.testing.assert_allclose(np.sort(after.factors().eigenvalues.real), np.arange(-19.0, 20.0, 2.0), atol=1e-12)


def test_a_steep_line_is_not_slow() -> None:
    # A spectrum of 3, 4, …, 65 and one complex pair: single real shifts need more sweeps than usual, but an entry falls
    # a thousandfold a sweep once it falls, and on a straight line in one stretch of six sweeps.
    n, rng = 65, np.random.default_rng(5)
    q = np.linalg.qr(rng.standard_normal((n, n)))[0]
    t = np.diag(np.r_[3.0 + np.arange(n - 2), 0.1, 0.1]) + 0.05 * np.triu(rng.standard_normal((n, n)), 1)
    t[n - 2 :, n - 2 :] = [[0.1, 0.2], [-0.2, 0.1]]
    run = sb.iterate(q @ t @ q.T, strategy="rayleigh", exceptional=False)
    assert "slow-ratio" not in [finding.cause for finding in sb.diagnose(run).findings]
