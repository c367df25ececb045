"""The diagnosis on cases whose cause is known: published closed forms, certified data, planted mechanisms."""

from __future__ import annotations

import json
from collections import Counter
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest
import scipy.linalg

import schurbench as sb
from schurbench.diagnosis import Rank, SettingsRemedy, SolverRemedy, solve_structured
from schurbench.diagnosis.case import Case
from schurbench.diagnosis.figures import healthy_figures
from schurbench.diagnosis.page import CAUTION, html_page, page
from schurbench.matching import pair_spectra
from schurbench.measures import RATIO_LIMIT
from tests.gallery import cyclic, day

DATA = Path(__file__).parent / "data"


def gaussian(n: int, rng: np.random.Generator) -> np.ndarray:
    return rng.standard_normal((n, n))


def rotation_blocks(blocks: int, rng: np.random.Generator) -> np.ndarray:
    """A real matrix with complex pairs only, orthogonally hidden."""
    n = 2 * blocks
    a = np.triu(0.3 * gaussian(n, rng), 2)
    for i in range(blocks):
        re, im = rng.standard_normal(), rng.uniform(0.3, 2.0)
        a[2 * i : 2 * i + 2, 2 * i : 2 * i + 2] = [[re, im], [-im, re]]
    q = np.linalg.qr(gaussian(n, rng))[0]
    return q @ a @ q.T


def close_moduli(n: int, gap: float, rng: np.random.Generator) -> np.ndarray:
    """Two largest eigenvalues of moduli 1 and 1 − gap, the rest below 0.6."""
    values = np.concatenate([rng.uniform(0.05, 0.6, n - 2), [1.0, (1.0 - gap) * rng.choice([-1, 1])]])
    x = gaussian(n, rng)
    return x @ np.diag(values) @ np.linalg.inv(x)


def hidden_jordan(n: int, k: int, rng: np.random.Generator) -> np.ndarray:
    """A Jordan block of order k at 1 among well-separated real eigenvalues, orthogonally hidden."""
    a = np.diag(np.concatenate([np.ones(k), 2.0 + np.arange(n - k) * rng.uniform(0.5, 1.5)]))
    a[np.arange(k - 1), np.arange(1, k)] = 1.0
    q = np.linalg.qr(gaussian(n, rng))[0]
    return q @ a @ q.T


def wildly_scaled(n: int, rng: np.random.Generator) -> np.ndarray:
    d = 10.0 ** rng.uniform(-5, 5, n)
    return gaussian(n, rng) / d[:, None] * d


def first_cause(matrix: np.ndarray, **settings: object) -> str:
    return sb.diagnose(sb.iterate(matrix, **settings)).findings[0].cause


# --- published cases ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "settings", [{"strategy": "zero"}, {"exceptional": False}, {"strategy": "wilkinson", "exceptional": 0}]
)
@pytest.mark.parametrize("n", [8, 21])
def test_cyclic_permutation_stands_still_and_one_exceptional_shift_frees_it(n: int, settings: dict) -> None:
    # Closed form: every unshifted step only permutes the matrix, and the trailing 2×2 block gives shifts 0.
    run = sb.iterate(cyclic(n), **settings)
    assert not run.converged
    diagnosis = sb.diagnose(run, try_remedies=True)
    finding = diagnosis.findings[0]
    assert finding.cause == "equal-moduli"
    assert finding.rows == tuple(range(n))
    assert finding.steps == (1, len(run.steps))
    assert finding.evidence["sweeps_without_deflation"] == run.sweeps
    assert finding.evidence["spread_of_shift_polynomial"] < 1e-12
    assert finding.evidence["measured_decay_per_sweep"] == pytest.approx(1.0, abs=1e-12)
    assert finding.evidence["predicted_decay_per_sweep"] == pytest.approx(1.0, abs=1e-12)
    assert diagnosis.forecast is None
    assert finding.remedy.result.helped
    assert finding.remedy.result.sweeps_after < 6 * n
    again = finding.remedy.run()
    values = again.ritz(len(again.steps))
    roots = np.exp(2j * np.pi * np.arange(n) / n)
    assert pair_spectra(values, roots)[1].max() < 1e-13


@pytest.mark.parametrize(("n", "eta"), [(4, 1e-3), (5, 1e-8), (8, 1e-10), (16, 1e-3)])
def test_days_family_is_named_equal_moduli_and_its_remedy_finds_the_closed_form(n: int, eta: float) -> None:
    run = sb.iterate(day(n, eta), exceptional=False, balance="none", limit=1500)
    assert not run.converged
    finding = sb.diagnose(run).findings[0]
    assert finding.cause == "equal-moduli"
    assert finding.remedy.settings["exceptional"] == 10
    again = finding.remedy.run()
    assert again.converged
    root = np.sqrt(1.0 + eta * np.exp(2j * np.pi * np.arange(n) / n))
    # Each of the two clusters is nearly defective: rounding ε moves its members by about ε·(condition 1/η^(1−1/n)).
    tolerance = 1e-14 / eta ** (1 - 1 / n) if n < 8 else 1e-14 / eta
    assert pair_spectra(again.ritz(len(again.steps)), np.concatenate([root, -root]))[1].max() < tolerance


def test_hadamard_matrix_needs_a_structured_solver_only() -> None:
    # Closed form: eigenvalues ±√8, four times each.
    diagnosis = sb.diagnose(sb.iterate(scipy.linalg.hadamard(8).astype(float)), try_remedies=True)
    finding = diagnosis.findings[0]
    assert finding.cause == "structure-unused"
    assert finding.remedy.result.helped
    values = np.sort(finding.remedy.run().eigenvalues)
    np.testing.assert_allclose(values, np.repeat([-(8**0.5), 8**0.5], 4), rtol=1e-14)


def test_unshifted_rates_of_the_toeplitz_tridiagonal_are_those_of_its_closed_form() -> None:
    # Eigenvalues 2 − 2cos(kπ/(n+1)); without a shift |h[r, r−1]| falls by the ratio of neighbouring ones a sweep.
    n = 12
    run = sb.iterate(scipy.linalg.toeplitz([2.0, -1.0] + [0.0] * (n - 2)), strategy="zero", limit=600)
    finding = sb.diagnose(run).findings[0]
    assert finding.cause == "slow-ratio"
    values = 2 - 2 * np.cos(np.arange(1, n + 1) * np.pi / (n + 1))
    ratios = values[:-1] / values[1:]
    row = int(finding.evidence["row"])
    assert finding.evidence["predicted_decay_per_sweep"] == pytest.approx(ratios[n - 1 - row], rel=1e-9)
    assert finding.evidence["measured_decay_per_sweep"] == pytest.approx(ratios[n - 1 - row], rel=0.02)


@pytest.mark.parametrize("strategy", ["francis", "multishift"])
def test_regulator_loop_iterates_slowly_because_it_is_poorly_scaled(strategy: str) -> None:
    # tests/data/README.md: CAREX 20. Windows of a few rows have a norm hundreds of times their eigenvalues.
    run = sb.iterate(sb.load(DATA / "closedloop_carex20.npz"), strategy)
    assert run.waits.max() > 50
    finding = sb.diagnose(run, try_remedies=True).findings[0]
    assert (finding.cause, finding.rank) == ("poor-scaling", Rank.ITERATION)
    H = run.state(len(run.steps)).H
    worst = max(run.steps, key=lambda step: run.waits[step.index - 1])
    block = H[slice(*worst.window), slice(*worst.window)]
    ratio = np.linalg.norm(block) / np.abs(np.linalg.eigvals(block)).max()
    assert finding.evidence["window_norm_over_largest_eigenvalue"] == pytest.approx(ratio, rel=1e-3)
    assert finding.remedy.settings["balance"] == "both"
    assert finding.remedy.result.helped
    assert finding.remedy.run().sweeps < run.sweeps / 3


def test_kinetics_jacobian_is_poorly_scaled_and_balancing_finds_certified_eigenvalues() -> None:
    # tests/data/README.md: Jacobian from cantera; eigenvalues certified from the exact characteristic polynomial.
    certified = json.loads((DATA / "certified" / "kinetics_gri30.json").read_text())
    exact = np.array([complex(_centre(re), _centre(im)) for re, im, count in certified for _ in range(int(count))])
    with np.load(DATA / "kinetics_gri30.npz") as archive:
        run = sb.iterate(archive["A"])
    diagnosis = sb.diagnose(run, try_remedies=True)
    finding = diagnosis.findings[0]
    assert finding.cause == "poor-scaling"
    assert finding.rank is Rank.EIGENVALUES
    assert finding.evidence["balance_factor"] > 1e3
    assert finding.remedy.result.helped
    assert "healthy" in [f.cause for f in diagnosis.findings]
    balanced = finding.remedy.run()
    assert balanced.settings.balance == "both"

    def largest_error(result: sb.Run) -> float:
        values = result.to_matrix_units(result.ritz(len(result.steps)))
        distance = pair_spectra(exact, values)[1]
        size = np.abs(exact)
        return float((distance[size > 0] / size[size > 0]).max())

    # The remedy may claim help only if eigenvalues really come nearer to the certified ones: 0.2 of their size before.
    assert largest_error(balanced) < 0.05 * largest_error(run)


def _centre(ball: object) -> float:
    """Centre of a ball such as ``[-1.5 +/- 3e-16]``, or of an exact value."""
    return float(str(ball).strip("[]").split("+/-")[0])


def companion(coefficients: np.ndarray) -> np.ndarray:
    return scipy.linalg.companion(coefficients).astype(float)


@pytest.mark.parametrize(("root", "power"), [(-1.0, 4), (-2.0, 4)])
def test_companion_of_a_fourth_power_is_a_cluster_of_four(root: float, power: int) -> None:
    # NA Digest 89:49 reports about 20 and 22 double-shift iterations to the first eigenvalue of these companions. The
    # eigenvalue is defective of order 4, so rounding spreads it over a ring of about ε^(1/4).
    run = sb.iterate(companion(np.poly([root] * power)))
    finding = next(f for f in sb.diagnose(run).findings if f.cause == "clustered")
    assert finding.evidence["members"] == 4
    assert finding.evidence["centre_real"] == pytest.approx(root, abs=1e-9)
    assert finding.evidence["centre_imaginary"] == pytest.approx(0.0, abs=1e-9)
    ring = (2.0**-52) ** 0.25
    assert 0.1 * ring < finding.evidence["measured_radius"] < 10 * ring * abs(root)
    assert "mean" in finding.remedy.text


def test_cluster_of_certified_companion_and_the_mean_its_remedy_returns() -> None:
    # tests/data/README.md: certified/companion_cluster20.json has the exact eigenvalues of this very matrix.
    with np.load(DATA / "companion_cluster20.npz") as archive:
        matrix = archive["A"]
    certified = json.loads((DATA / "certified" / "companion_cluster20.json").read_text())
    exact = np.array([complex(_centre(re), _centre(im)) for re, im, count in certified for _ in range(int(count))])
    run = sb.iterate(matrix)
    finding = next(f for f in sb.diagnose(run).findings if f.cause == "clustered")
    members = int(finding.evidence["members"])
    centre = complex(finding.evidence["centre_real"], finding.evidence["centre_imaginary"])
    nearest = exact[np.argsort(np.abs(exact - centre))[:members]]
    single = pair_spectra(run.ritz(len(run.steps)), exact)[1].max()
    assert abs(nearest.mean() - centre) < 1e-3 * single
    factors = finding.remedy.run()
    np.testing.assert_allclose(np.sort(np.abs(factors.eigenvalues[:members] - centre)) < 0.1, True)
    namespace: dict = {"matrix": matrix, "schurbench": sb}
    exec(finding.remedy.call, namespace)
    np.testing.assert_array_equal(namespace["factors"].T, factors.T)


def test_frank_matrix_is_non_normal_and_its_published_eigenvalues_lie_within_the_predicted_movement() -> None:
    # Frank, n = 12: Wilkinson, The Algebraic Eigenvalue Problem; Golub & Wilkinson 1976 (table to 9 digits).
    n = 12
    i, j = np.indices((n, n))
    frank = np.where(j >= i - 1, n - np.maximum(i, j), 0).astype(float)
    larger = [32.2288915, 20.1989886, 12.3110774, 6.96153309, 3.51185595, 1.55398871]
    smaller = [0.643505319, 0.284749721, 0.143646520, 0.0812276592, 0.0495074292, 0.0310280606]
    published = np.array([*larger, *smaller])
    run = sb.iterate(frank)
    findings = sb.diagnose(run).findings
    assert [f.cause for f in findings] == ["non-normal", "healthy"]
    movements = Case(run).movements
    values = run.ritz(len(run.steps))
    order, distance = pair_spectra(values, published)
    digits = 1e-8 * published[order]  # what the table itself leaves open
    assert np.all(distance <= 10 * movements + digits)
    assert findings[0].evidence["largest_condition_number"] > 1e7
    assert findings[0].evidence["predicted_movement_by_rounding"] > 1e-8


@pytest.mark.parametrize("settings", [{}, {"strategy": "wilkinson"}])
def test_multiple_eigenvalues_of_normal_matrices_are_not_called_ill_determined(settings: dict) -> None:
    rng = np.random.default_rng(15)
    for values in ([0.0] * 19 + [1.0], [1.0] * 10 + [2.0] * 10, [1.0] * 3 + [5.0] * 17, list(range(10)) * 2):
        q = np.linalg.qr(gaussian(20, rng))[0]
        causes = [f.cause for f in sb.diagnose(sb.iterate(q * values @ q.T, **settings)).findings]
        assert "clustered" not in causes
        assert "non-normal" not in causes
        x = gaussian(20, rng)
        causes = [f.cause for f in sb.diagnose(sb.iterate(x * values @ np.linalg.inv(x), **settings)).findings]
        assert "clustered" not in causes
    causes = [f.cause for f in sb.diagnose(sb.iterate(np.ones((20, 20)), **settings)).findings]
    assert "structure-unused" in causes
    assert not {"clustered", "non-normal"} & set(causes)


def test_condition_numbers_against_their_definition() -> None:
    rng = np.random.default_rng(14)
    for form in ("real", "complex"):
        run = sb.iterate(gaussian(25, rng), form=form)
        case = Case(run)
        values, left, right = scipy.linalg.eig(run.matrix.array, left=True, right=True)
        expected = 1.0 / np.abs((left.conj() * right).sum(axis=0))
        order = pair_spectra(case.eigenvalues, values)[0]
        np.testing.assert_allclose(case.conditions, expected[order], rtol=1e-8)


# --- planted mechanisms -------------------------------------------------------------------------------------------

PLANTED = {
    "zero shift on orthogonal": (
        "equal-moduli",
        lambda n, rng: np.linalg.qr(gaussian(n, rng))[0],
        {"strategy": "zero"},
    ),
    "double shift on cyclic": ("equal-moduli", lambda n, rng: rng.uniform(0.1, 9) * cyclic(n), {"exceptional": False}),
    "real shift on pairs": (
        "real-shift-on-pair",
        lambda n, rng: rotation_blocks(n // 2, rng),
        {"strategy": "rayleigh"},
    ),
    "real shift on pairs, complex form": (
        "real-shift-on-pair",
        lambda n, rng: rotation_blocks(n // 2, rng),
        {"strategy": "rayleigh", "form": "complex"},
    ),
    "close moduli": (
        "slow-ratio",
        lambda n, rng: close_moduli(n, 10.0 ** rng.uniform(-2.5, -1), rng),
        {"strategy": "zero", "form": "complex"},
    ),
    "wild scaling": ("poor-scaling", wildly_scaled, {}),
    "wild scaling, complex form": ("poor-scaling", wildly_scaled, {"strategy": "wilkinson"}),
    "hidden Jordan block": ("clustered", lambda n, rng: hidden_jordan(n, 5, rng), {}),
    "symmetric": ("structure-unused", lambda n, rng: (lambda a: a + a.T)(gaussian(n, rng)), {}),
    "orthogonal": ("structure-unused", lambda n, rng: np.linalg.qr(gaussian(n, rng))[0], {}),
}


@pytest.mark.parametrize("name", PLANTED)
def test_planted_causes_are_named_first(name: str) -> None:
    cause, make, settings = PLANTED[name]
    rng = np.random.default_rng(20)
    found = Counter(first_cause(make(int(rng.integers(8, 40)), rng), **settings) for _ in range(25))
    assert found[cause] >= 24, found


@pytest.mark.parametrize(
    "settings", [{}, {"strategy": "wilkinson"}, {"form": "complex", "strategy": "francis"}, {"balance": "none"}]
)
def test_healthy_runs_are_called_healthy(settings: dict) -> None:
    rng = np.random.default_rng(4)
    found = Counter()
    blamed = 0
    for i in range(120):
        a = gaussian(int(rng.integers(3, 50)), rng)
        if i % 2:
            # Random Hessenberg matrices are exponentially non-normal, so eigenvalues may be called ill-determined;
            # the iteration on them is healthy all the same.
            findings = sb.diagnose(sb.iterate(np.triu(a, -1), **settings)).findings
            blamed += findings[0].rank is Rank.ITERATION
            assert findings[0].cause in ("healthy", "non-normal", "clustered", "unexplained", "slow-ratio")
        else:
            found[first_cause(a, **settings)] += 1
    assert found["healthy"] >= 59, found
    assert blamed <= 1


def test_complex_matrix_with_rayleigh_shifts_is_healthy() -> None:
    rng = np.random.default_rng(5)
    run = sb.iterate(gaussian(40, rng) + 1j * gaussian(40, rng), strategy="rayleigh")
    finding = sb.diagnose(run).findings[0]
    assert finding.cause == "healthy"
    assert finding.evidence["measured_sweeps_per_eigenvalue"] == pytest.approx(run.sweeps / 40)
    assert "Rayleigh" in finding.statement


def test_real_shift_finding_shows_the_equal_distances() -> None:
    run = sb.iterate(rotation_blocks(8, np.random.default_rng(2)), strategy="rayleigh")
    finding = sb.diagnose(run, try_remedies=True).findings[0]
    assert finding.evidence["distance_to_pair"] == pytest.approx(finding.evidence["distance_to_conjugate"])
    assert finding.evidence["imaginary_part_of_pair"] > 0.0
    assert len(finding.rows) >= 2
    assert finding.remedy.settings == {"strategy": "francis"}
    assert finding.remedy.result.helped
    assert finding.remedy.result.converged_after


# --- the rules around the causes ----------------------------------------------------------------------------------


def test_findings_are_ranked_trouble_before_values_before_advice() -> None:
    rng = np.random.default_rng(8)
    run = sb.iterate(np.linalg.qr(gaussian(15, rng))[0], strategy="zero")
    diagnosis = sb.diagnose(run)
    ranks = [finding.rank for finding in diagnosis.findings]
    assert ranks == sorted(ranks)
    assert [f.cause for f in diagnosis.findings] == ["equal-moduli", "structure-unused"]


def test_a_remedy_that_does_not_help_says_so_and_stands_below_one_that_does() -> None:
    # Without the exceptional shift Day's matrix stalls; with it the run is unhealthy still, and no other shift is much
    # better: the remedy has to admit that.
    run = sb.iterate(day(5, 1e-6))
    diagnosis = sb.diagnose(run, try_remedies=True)
    results = [f.remedy.result for f in diagnosis.findings if f.remedy is not None]
    assert results
    for result in results:
        assert result.helped == (
            result.converged_after
            and (not result.converged_before or result.sweeps_after <= 0.8 * result.sweeps_before)
        )
        assert ("did not help" in result.statement) != result.helped
    flags = [r.helped for r in results]
    assert flags == sorted(flags, reverse=True)


def test_a_run_ended_by_its_limit_is_not_blamed_on_the_iteration() -> None:
    run = sb.iterate(gaussian(50, np.random.default_rng(1)), limit=25)
    diagnosis = sb.diagnose(run, try_remedies=True)
    finding = diagnosis.findings[0]
    assert finding.cause == "stopped-early"
    assert finding.remedy.result.helped
    assert "limit" not in finding.remedy.settings


def test_forecast_of_an_unfinished_run_holds_the_sweeps_it_really_needed() -> None:
    rng = np.random.default_rng(30)
    held = 0
    for _ in range(40):
        a = gaussian(60, rng)
        whole = sb.iterate(a)
        forecast = sb.diagnose(sb.iterate(a, limit=60)).forecast
        assert forecast is not None
        left = whole.sweeps - 60
        held += forecast.sweeps_left_range[0] <= left <= forecast.sweeps_left_range[1]
    assert held >= 35  # the range is about two standard deviations


def test_forecast_of_a_finished_run_compares_with_healthy_ones_and_none_is_made_without_evidence() -> None:
    a = gaussian(40, np.random.default_rng(2))
    run = sb.iterate(a)
    forecast = sb.diagnose(run).forecast
    low, high = healthy_figures(run).sweeps
    assert forecast.finished
    assert forecast.healthy_sweeps == (40 * low, 40 * high)
    assert forecast.sweeps == run.sweeps
    assert sb.diagnose(sb.iterate(a, limit=2)).forecast is None


def test_remedy_settings_keep_what_the_run_had_and_change_what_they_name() -> None:
    a = wildly_scaled(20, np.random.default_rng(3))
    run = sb.iterate(a, strategy="wilkinson", deflation="neighbour", flip=True, exceptional=7, limit=500)
    finding = sb.diagnose(run).findings[0]
    assert finding.cause == "poor-scaling"
    assert finding.remedy.settings == {
        "strategy": "wilkinson",
        "form": "complex",
        "exceptional": 7,
        "flip": True,
        "deflation": "neighbour",
        "balance": "both",
    } or finding.remedy.settings == {
        "form": "complex",
        "exceptional": 7,
        "flip": True,
        "deflation": "neighbour",
        "balance": "both",
    }
    assert finding.remedy.changes == ("balance",)
    again = finding.remedy.run()
    for name in ("strategy", "form", "flip", "deflation", "exceptional"):
        assert getattr(again.settings, name) == getattr(run.settings, name)
    assert again.settings.balance == "both"


def test_remedy_of_given_shifts_keeps_the_shifts() -> None:
    a = wildly_scaled(12, np.random.default_rng(6))
    run = sb.iterate(a, strategy="given", shifts=[0.5, 1 + 2j, 1 - 2j])
    remedies = {f.cause: f.remedy for f in sb.diagnose(run).findings}
    assert remedies["poor-scaling"].settings["shifts"] == [0.5, 1 + 2j, 1 - 2j]
    assert remedies["poor-scaling"].run().settings.options == run.settings.options


def test_run_that_did_not_permute_a_reducible_matrix() -> None:
    rng = np.random.default_rng(7)
    a = gaussian(20, rng)
    a[15:, :15] = 0.0
    a[15:, 15:] = np.triu(a[15:, 15:])
    order = rng.permutation(20)
    run = sb.iterate(a[np.ix_(order, order)], balance="none")
    finding = next(f for f in sb.diagnose(run).findings if f.cause == "reducible")
    assert finding.evidence["isolated_eigenvalues"] == 5
    assert finding.evidence["largest_block"] == 15
    assert finding.remedy.run().preparation.isolated == (0, 15)
    assert "reducible" not in [f.cause for f in sb.diagnose(sb.iterate(a)).findings]


@pytest.mark.parametrize("structure", ["hermitian", "skew", "normal"])
@pytest.mark.parametrize("n", [1, 2, 30, 100])
def test_structured_solver_against_the_eigenvalues_it_was_built_from(structure: str, n: int) -> None:
    rng = np.random.default_rng(n)
    u = np.linalg.qr(gaussian(n, rng) + 1j * gaussian(n, rng))[0]
    values = {
        "hermitian": rng.standard_normal(n) + 0j,
        "skew": 1j * rng.standard_normal(n),
        "normal": np.exp(2j * np.pi * np.arange(n) / n),
    }[structure]
    a = u * values @ u.conj().T
    found, vectors = solve_structured(a, structure)
    assert pair_spectra(found, values)[1].max() < 1e-13
    assert np.linalg.norm(a @ vectors - vectors * found) < 1e-12
    assert np.linalg.norm(vectors.conj().T @ vectors - np.eye(n)) < 1e-12


def test_cyclic_matrix_of_order_100_through_the_normal_solver() -> None:
    finding = sb.diagnose(sb.iterate(cyclic(100))).findings[0]
    assert isinstance(finding.remedy, SolverRemedy)
    solution = finding.remedy.run()
    assert solution.backward_error < RATIO_LIMIT
    namespace: dict = {"matrix": cyclic(100)}
    exec(finding.remedy.call, namespace)  # the lines shown to the user must run as they stand
    np.testing.assert_array_equal(namespace["values"], solution.eigenvalues)


@pytest.mark.parametrize("a", [np.array([[3.0]]), np.zeros((4, 4)), np.triu(np.ones((5, 5))), np.eye(3) * 1e300])
def test_nothing_to_iterate_is_healthy(a: np.ndarray) -> None:
    diagnosis = sb.diagnose(sb.iterate(a), try_remedies=True)
    assert diagnosis.findings[-1].cause == "healthy"
    assert diagnosis.forecast.statement == "Finished without a sweep."
    json.dumps(diagnosis.to_dict(), allow_nan=False)


def test_states_are_named_where_the_source_has_names() -> None:
    # Two groups that do not know each other: five rotations for the real shift to fail on, and a diagonal part.
    rng = np.random.default_rng(12)
    a = scipy.linalg.block_diag(np.diag(np.arange(1.0, 31.0)), rotation_blocks(5, rng))
    a[:30, 30:] = 1e-3 * rng.standard_normal((30, 10))
    labels = [f"level {i}" for i in range(30)] + [f"wave {i}" for i in range(10)]
    run = sb.iterate(sb.load(a, labels=labels), strategy="rayleigh")
    finding = next(f for f in sb.diagnose(run).findings if f.cause == "real-shift-on-pair")
    assert "wave" in finding.statement


def test_short_record_in_memory_is_judged_without_a_long_replay() -> None:
    run = sb.iterate(gaussian(150, np.random.default_rng(3)), strategy="zero", limit=4000, keep=0)
    case = Case(run)
    steps = case.sampled_steps(case.troubled[0])
    diagnosis = sb.diagnose(run)
    assert diagnosis.findings[0].cause in ("slow-ratio", "unexplained")
    assert not steps.size or 6 * run.phases["iterate"] <= 0.05 or steps.max() < run.journal.held


def test_to_dict_has_the_promised_fields_and_survives_strict_json(tmp_path: Path) -> None:
    run = sb.iterate(rotation_blocks(5, np.random.default_rng(1)), strategy="rayleigh")
    diagnosis = sb.diagnose(run, try_remedies=True)
    data = json.loads(json.dumps(diagnosis.to_dict(), allow_nan=False))
    for finding in data["findings"]:
        assert {"cause", "statement", "evidence", "rows", "steps", "remedy", "confidence"} <= set(finding)
        assert all(isinstance(v, (int, float, str)) or v is None for v in finding["evidence"].values())
    assert "forecast" in data
    again = sb.diagnose(sb.open_run(run.save(tmp_path / "run.npz")))
    assert [f.to_dict()["evidence"] for f in again.findings] == [f["evidence"] for f in data["findings"]]


# --- the page -----------------------------------------------------------------------------------------------------


class _Tags(HTMLParser):
    """Collects tags and attributes; the page may use a closed list of harmless ones."""

    def __init__(self) -> None:
        super().__init__()
        self.tags: Counter[str] = Counter()
        self.links: list[str] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags[tag] += 1
        self.links += [name for name, _ in attrs if name in ("src", "href", "style") or name.startswith("on")]


HOSTILE = "<script>alert(1)</script>\"'&\nrm -rf"


def test_html_page_escapes_every_name_and_fetches_nothing() -> None:
    a = rotation_blocks(6, np.random.default_rng(9))
    a[0] *= 1e8
    matrix = sb.load(a, labels=[f"{HOSTILE.replace(chr(10), ' ')} {i}" for i in range(12)])
    object.__setattr__(matrix, "name", HOSTILE)
    object.__setattr__(matrix, "source", HOSTILE)
    run = sb.iterate(matrix, strategy="rayleigh")
    text = html_page(run, sb.diagnose(run, try_remedies=True))
    assert "<script>" not in text
    reader = _Tags()
    reader.feed(text)
    assert reader.tags["svg"] == 2
    assert not reader.links
    assert not set(reader.tags) & {"script", "img", "link", "iframe", "object", "base", "form"}
    assert run.matrix.sha256 in text
    assert "licensed" in text


def test_plain_page_carries_remedies_that_run_as_they_stand(tmp_path: Path) -> None:
    path = tmp_path / "it's a plant.npy"
    np.save(path, cyclic(12))
    run = sb.iterate(str(path), exceptional=False)
    diagnosis = sb.diagnose(run, try_remedies=True)
    text = page(run, diagnosis)
    assert CAUTION in text
    assert run.matrix.sha256 in text
    assert run.matrix.file_sha256 in text
    assert diagnosis.findings[0].statement in text
    assert isinstance(diagnosis.findings[0].remedy, SettingsRemedy)
    block = text.split("What to try:")[1].splitlines()[1:5]
    code = [line.strip() for line in block if line.startswith("       ")]
    command = next(line for line in code if line.startswith("schurbench run"))
    python = [line for line in code if line != command]
    namespace: dict = {}
    exec("\n".join([*python[:-1], f"again = {python[-1]}"]), namespace)
    assert namespace["again"].converged

    import shlex

    from schurbench.cli import main

    words = shlex.split(command)
    words[words.index("-o") + 1] = str(tmp_path / "remedy.npz")
    assert main(words[1:]) == 0
    assert sb.open_run(tmp_path / "remedy.npz").sweeps == namespace["again"].sweeps
