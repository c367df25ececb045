"""Hard cases crossed with every strategy: published answers, certified eigenvalues, LAPACK's matrix types.

Eigenvalues are compared within their condition numbers: |Δλ| ≤ slack · n · ulp · ‖A‖ / s(λ) (Golub & Van Loan, 4th ed.,
§7.2.2), where s comes from scipy's left and right eigenvectors. Multiple eigenvalues are compared by the mean of their
cluster. Names and values: see each case.
"""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
import scipy.io
import scipy.linalg

import schurbench as sb
from schurbench.journal import DeflationKind
from schurbench.measures import RATIO_LIMIT, ULP, orthogonality_ratio, residual_ratio
from tests import gallery
from tests.gallery import lapack_types, matched_distance

DATA = Path(__file__).parent / "data"

STRATEGIES = ("zero", "rayleigh", "francis", "wilkinson", "multishift")
SOUND = ("francis", "wilkinson", "multishift")  # those that must converge


def check(run: sb.Run, *, must_converge: bool) -> None:
    """Ratios under the limit whether or not it converged; exact structure where it did."""
    state = run.state(len(run.steps))
    working = run.preparation.working(run.matrix)
    what = f"{run.matrix.name}, {run.settings.strategy}, {run.stop.message}"
    assert residual_ratio(working, state.Z, state.H) < RATIO_LIMIT, what
    assert orthogonality_ratio(state.Z) < RATIO_LIMIT, what
    assert not np.tril(state.H, -2).any(), what
    if must_converge:
        assert run.converged, what
    if run.converged:
        sub = np.diag(state.H, -1)
        assert not (sub[:-1] * sub[1:]).any(), what
        if run.settings.form == "complex":
            assert not sub.any(), what
        for i in np.flatnonzero(sub):
            assert state.H[i, i] == state.H[i + 1, i + 1], what
            assert state.H[i, i + 1] * state.H[i + 1, i] < 0 or np.sign(state.H[i, i + 1]) != np.sign(sub[i]), what
        assert sum(d.size for d in run.deflations if d.kind is not DeflationKind.SPLIT) == run.n, what


def eigenvalues(run: sb.Run) -> np.ndarray:
    return run.to_matrix_units(run.ritz(len(run.steps)))


def condition_numbers(a: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """LAPACK's eigenvalues and 1/s(λ)."""
    w, left, right = scipy.linalg.eig(a, left=True, right=True)
    s = np.abs(np.sum(left.conj() * right, axis=0)) / (np.linalg.norm(left, axis=0) * np.linalg.norm(right, axis=0))
    return w, 1.0 / np.maximum(s, 1e-300)


@pytest.mark.parametrize("complex_", [False, True], ids=["real", "complex"])
@pytest.mark.parametrize("n", [1, 2, 3, 5, 10, 16])
def test_lapack_types_small(n: int, complex_: bool) -> None:
    for name, a in lapack_types(n, complex_):
        for strategy in STRATEGIES:
            run = sb.iterate(sb.load(a, name=name), strategy=strategy, limit=None if strategy in SOUND else 150)
            check(run, must_converge=strategy in SOUND)


@pytest.mark.slow
@pytest.mark.parametrize("complex_", [False, True], ids=["real", "complex"])
@pytest.mark.parametrize("n", [40, 100])
def test_lapack_types_large(n: int, complex_: bool) -> None:
    for name, a in lapack_types(n, complex_):
        for strategy in STRATEGIES:
            for balance in ("permute", "both"):
                run = sb.iterate(
                    sb.load(a, name=name),
                    strategy=strategy,
                    balance=balance,
                    limit=None if strategy in SOUND else 300,
                )
                check(run, must_converge=strategy in SOUND)


@pytest.mark.slow
@pytest.mark.parametrize("complex_", [False, True], ids=["real", "complex"])
def test_lapack_types_with_deflation_windows(complex_: bool) -> None:
    """Large enough for many shifts a sweep."""
    for name, a in lapack_types(170, complex_):
        for balance in ("permute", "both"):
            check(sb.iterate(sb.load(a, name=name), "multishift", balance=balance), must_converge=True)


FRANK_12 = [  # Golub & Wilkinson, SIAM Review 18 (1976); Wilkinson, The Algebraic Eigenvalue Problem (1965)
    32.2288915, 20.1989886, 12.3110774, 6.96153309, 3.51185595, 1.55398871,
    0.643505319, 0.284749721, 0.143646520, 0.0812276592, 0.0495074292, 0.0310280606,
]  # fmt: skip

PUBLISHED = {
    "Frank, n = 12": (gallery.frank(12), FRANK_12),
    "Rosser": (
        gallery.rosser(),
        [10 * 10405**0.5, -10 * 10405**0.5, 1020, 510 + 100 * 26**0.5, 510 - 100 * 26**0.5, 1000, 1000, 0],
    ),
    "Clement, n = 20": (gallery.clement(20), [s * k for k in range(1, 20, 2) for s in (1, -1)]),
    "cyclic, n = 16": (gallery.cyclic(16), np.exp(2j * np.pi * np.arange(16) / 16)),
    "Toeplitz tridiagonal": (
        gallery.toeplitz_tridiagonal(25, 2.0, -1.0, 0.5),
        -1.0 + 2.0 * np.cos(np.arange(1, 26) * np.pi / 26),
    ),
    "Forsythe, n = 10": (gallery.forsythe(10, 1e-6), 1e-6**0.1 * np.exp(2j * np.pi * np.arange(10) / 10)),
    "Day, n = 12": (
        gallery.day(6, 1e-2),
        [s * np.sqrt(1 + 1e-2 * np.exp(2j * np.pi * k / 6)) for k in range(6) for s in (1, -1)],
    ),
    "Hadamard, n = 8": (gallery.hadamard(8), [8**0.5, -(8**0.5)] * 4),
}


@pytest.mark.parametrize("balance", ["permute", "both"])
@pytest.mark.parametrize("strategy", SOUND)
@pytest.mark.parametrize("case", PUBLISHED)
def test_published_eigenvalues(case: str, strategy: str, balance: str) -> None:
    a, published = PUBLISHED[case]
    run = sb.iterate(a, strategy=strategy, balance=balance)
    check(run, must_converge=True)
    exact = np.asarray(published, dtype=complex)
    digits = 5e-9 * np.abs(exact) if case.startswith("Frank") else 0.0  # printed to nine figures
    _, condition = condition_numbers(a)
    allowed = 10 * len(a) * ULP * np.linalg.norm(a, 1) * np.sort(condition)[::-1].max() + digits
    assert np.all(matched_distance(eigenvalues(run), exact) <= allowed)


def test_wilkinson_plus_has_its_close_pair() -> None:
    """W21+: the two largest are 10.74619418290339… and 7.16·10⁻¹⁴ less (Wilkinson 1965, ch. 5 §45)."""
    for strategy in SOUND:
        run = sb.iterate(gallery.wilkinson_plus(), strategy=strategy)
        values = np.sort(eigenvalues(run).real)[::-1]
        assert abs(values[0] - 10.74619418290339) < 1e-13
        assert abs(values[0] - values[1]) < 2e-13


def test_first_eigenvalue_of_the_hard_companions() -> None:
    """Companions of (x²−2)², (x+1)⁴, (x+2)⁴ need about 29, 20 and 22 double shifts to the first eigenvalue.

    Source: NA Digest 89:49, for a program of its time; ours must be of that order, and by the mean of the cluster right.
    """
    for coefficients, reported, centre in (
        ([1, 0, -4, 0, 4], 29, 0.0),
        ([1, 4, 6, 4, 1], 20, -1.0),
        ([1, 8, 24, 32, 16], 22, -2.0),
    ):
        run = sb.iterate(gallery.companion(coefficients), "francis", balance="none", deflation="neighbour")
        assert run.converged
        first = run.deflations[0].step
        assert reported / 3 <= first <= 3 * reported
        assert abs(eigenvalues(run).mean() - centre) < 1e-12


def test_skew_tridiagonal_near_underflow() -> None:
    """4×4 skew matrix whose coupling nearly underflows (Reference-LAPACK issue 263): moduli as given there."""
    # Eigenvalues ±0.49328639818703257i and ±0.0082263841908860111i fix the outer entries; the middle one is ours.
    outer, inner = 0.49328639818703257, 0.0082263841908860111
    for middle in (1e-160, 1e-200, 1e-308):
        a = np.zeros((4, 4))
        a[0, 1], a[1, 0] = outer, -outer
        a[2, 3], a[3, 2] = inner, -inner
        a[1, 2], a[2, 1] = middle, -middle
        for strategy in SOUND:
            run = sb.iterate(a, strategy=strategy)
            check(run, must_converge=True)
            exact = np.array([1j * outer, -1j * outer, 1j * inner, -1j * inner])
            assert matched_distance(eigenvalues(run), exact).max() < 10 * ULP


def load_certified(name: str) -> tuple[np.ndarray, np.ndarray]:
    """Exact eigenvalues with their multiplicities, as midpoints of the certified balls."""
    from flint import arb

    entries = json.loads((DATA / "certified" / f"{name}.json").read_text())
    entries = entries.get("eigenvalues", entries) if isinstance(entries, dict) else entries
    values, counts = [], []
    for re, im, multiplicity in entries:
        values.append(complex(float(arb(re).mid()), float(arb(im).mid())))
        counts.append(int(multiplicity))
    return np.array(values), np.array(counts)


CERTIFIED = sorted(p.stem for p in (DATA / "certified").glob("*.json"))


@pytest.mark.parametrize("strategy", SOUND)
@pytest.mark.parametrize("name", CERTIFIED)
def test_certified_eigenvalues(name: str, strategy: str) -> None:
    """Certified by exact characteristic polynomials (tests/data/README.md): each within its condition number."""
    a = np.load(DATA / f"{name}.npz")["A"]
    values, counts = load_certified(name)
    assert counts.sum() == len(a)
    run = sb.iterate(a, strategy=strategy)
    check(run, must_converge=True)
    found = eigenvalues(run)
    w, condition = condition_numbers(a)
    exact = np.repeat(values, counts)
    from scipy.optimize import linear_sum_assignment

    mine = np.empty(len(a))
    rows, columns = linear_sum_assignment(np.abs(exact[:, None] - found[None, :]))
    mine[rows] = np.abs(exact[rows] - found[columns])
    rows, columns = linear_sum_assignment(np.abs(exact[:, None] - w[None, :]))
    conditions = np.empty(len(a))
    conditions[rows] = condition[columns]
    allowed = 5 * len(a) * ULP * np.linalg.norm(a, 2) * conditions
    simple = np.repeat(counts, counts) == 1
    # first-order bounds hold while the movement is small against the distance to the next eigenvalue
    distance = np.abs(exact[:, None] - exact[None, :])
    np.fill_diagonal(distance, np.inf)
    separate = allowed < 0.3 * distance.min(axis=1)
    held = simple & separate
    assert np.all(mine[held] <= allowed[held])
    # the mean of all eigenvalues is perfectly conditioned
    assert abs(found.mean() - exact.mean()) <= 5 * len(a) * ULP * np.linalg.norm(a, 2)


FILES = sorted([*DATA.glob("*.npz"), *DATA.glob("*.mtx")])


@pytest.mark.parametrize("strategy", STRATEGIES)
@pytest.mark.parametrize("path", FILES, ids=[p.name for p in FILES])
def test_real_matrices_with_every_strategy(path: Path, strategy: str) -> None:
    m = sb.load(path)
    for balance in ("permute", "both"):
        run = sb.iterate(m, strategy=strategy, balance=balance, limit=None if strategy in SOUND else 400)
        check(run, must_converge=strategy in SOUND)


def test_spectra_agree_with_lapack() -> None:
    """Random matrices against scipy.linalg.schur, within condition numbers; seeds 0 … 9."""
    for seed in range(10):
        rng = np.random.default_rng(seed)
        n = int(rng.integers(5, 60))
        a = rng.standard_normal((n, n))
        _, condition = condition_numbers(a)
        reference = np.diag(scipy.linalg.schur(a, output="complex")[0])
        for strategy in SOUND:
            found = eigenvalues(sb.iterate(a, strategy=strategy))
            bound = 20 * n * ULP * np.linalg.norm(a, 2) * condition.max()
            assert matched_distance(found, reference).max() <= bound, f"seed {seed}"
