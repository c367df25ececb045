"""Factors against published spectra, certified eigenvalues, LAPACK through scipy, and mpmath at 50 digits."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import mpmath
import numpy as np
import pytest
import scipy.linalg
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

import schurbench as sb
from schurbench.factors.certificate import certify
from schurbench.factors.conditioning import condition_numbers, distances_to_spectrum_at, separations
from schurbench.factors.reorder import bring_to_top
from schurbench.factors.triangular import eigenvalues_of, is_exact, restore_underflowed_blocks, solve_small_blocks
from schurbench.matching import pair_spectra
from schurbench.measures import RATIO_LIMIT, ULP, orthogonality_ratio, residual_ratio
from tests.gallery import frank, rosser

MATRICES = [
    "closedloop_carex15.npz",
    "companion_cluster20.npz",
    "companion_wilkinson20.npz",
    "gyro_wiresaw50.npz",
    "hamiltonian_carex15.npz",
    "impcol_a.mtx",
    "kinetics_gri30.npz",
    "markov_rw136.npz",
    "west0067.mtx",
]
SETTINGS: list[dict[str, Any]] = [
    {"strategy": "francis"},
    {"strategy": "francis", "balance": "both"},
    {"strategy": "wilkinson"},
    {"strategy": "wilkinson", "balance": "scale", "flip": True},
]


def tridiagonal(below: Any, on: Any, above: Any) -> np.ndarray:
    return np.diag(np.asarray(below, float), -1) + np.diag(np.asarray(on, float)) + np.diag(np.asarray(above, float), 1)


def within_conditioning(factors: sb.Factors, exact: np.ndarray, published_digits: float = 0.0) -> None:
    """Every eigenvalue lies within what the backward error can have moved it, to first order."""
    certificate = factors.certificate()
    order, distance = pair_spectra(factors.eigenvalues, exact)
    backward = max(1.0, certificate.backward_error) * factors.n
    allowed = backward * certificate.rounding_movement + published_digits * np.abs(exact[order])
    assert (distance <= allowed).all(), (distance / allowed).max()


def certified(path: Path) -> list[tuple[complex, float, int]]:
    """Midpoint, radius and multiplicity of each ball in a file of tests/data/certified."""

    def ball(text: str) -> tuple[float, float]:
        middle, _, radius = text.strip("[]").partition("+/-")
        return float(middle or 0.0), float(radius or 0.0)

    entries = []
    for real, imaginary, multiplicity in json.loads(path.read_text(encoding="utf-8")):
        (x, rx), (y, ry) = ball(real), ball(imaginary)
        entries.append((complex(x, y), rx + ry, int(multiplicity)))
    return entries


@pytest.mark.parametrize("settings", SETTINGS, ids=lambda s: "-".join(map(str, s.values())))
@pytest.mark.parametrize("name", MATRICES)
def test_factors_of_real_matrices_pass_with_exact_structure(data: Path, name: str, settings: dict[str, Any]) -> None:
    run = sb.iterate(data / name, **settings)
    factors = run.factors()
    certificate = factors.certificate()
    assert factors.complete
    assert certificate.passed, certificate.sentence
    # Not through the certificate: the very arrays against the loaded matrix.
    a, t, z = factors.matrix.array, factors.T, factors.Z
    assert residual_ratio(a, z, t) < RATIO_LIMIT
    assert orthogonality_ratio(z) < RATIO_LIMIT
    assert not np.tril(t, -2).any()
    sub = np.diagonal(t, -1)
    if factors.form == "complex":
        assert not sub.any()
    for i in np.flatnonzero(sub):
        assert t[i, i] == t[i + 1, i + 1]
        assert np.sign(t[i, i + 1]) == -np.sign(t[i + 1, i]) != 0
    assert not (sub[:-1].astype(bool) & sub[1:].astype(bool)).any()


@pytest.mark.parametrize("strategy", ["francis", "wilkinson"])
@pytest.mark.parametrize(
    "file", sorted((Path(__file__).parent / "data" / "certified").glob("*.json")), ids=lambda p: p.stem
)
def test_eigenvalues_agree_with_certified_ones(data: Path, file: Path, strategy: str) -> None:
    # Rigorous enclosures of the eigenvalues of this very matrix by python-flint; see tests/data/README.md.
    source = data / f"{file.stem}.npz"
    factors = sb.iterate(source, strategy=strategy).factors()
    entries = certified(file)
    assert sum(multiplicity for _, _, multiplicity in entries) == factors.n
    assert max(radius for _, radius, _ in entries) < 1e-12 * np.linalg.norm(factors.T)
    exact = np.array([value for value, _, multiplicity in entries for _ in range(multiplicity)])
    within_conditioning(factors, exact)


def test_frank_12_as_published() -> None:
    # Golub and Wilkinson, SIAM Review 18, 1976; nine digits are printed there.
    printed = np.fromstring(
        "32.2288915 20.1989886 12.3110774 6.96153309 3.51185595 1.55398871 "
        ".643505319 .284749721 .143646520 .0812276592 .0495074292 .0310280606",
        sep=" ",
    )
    factors = sb.iterate(frank(12)).factors()
    within_conditioning(factors, printed, published_digits=5e-9)
    # λ and 1/λ come in pairs (same paper).
    values = np.sort(factors.eigenvalues.real)
    np.testing.assert_allclose(
        values * values[::-1], 1.0, atol=2 * 12 * ULP * 100 * factors.certificate().condition.max()
    )


def test_rosser_as_published() -> None:
    # Rosser, Lanczos, Hestenes and Karush, J. Res. NBS 47, 1951.
    r = np.sqrt(10405.0)
    exact = np.array([-10 * r, 0, 510 - 100 * np.sqrt(26), 1000, 1000, 510 + 100 * np.sqrt(26), 1020, 10 * r])
    within_conditioning(sb.iterate(rosser()).factors(), exact)


def test_wilkinson_21_pair_is_told_apart_only_as_far_as_it_can_be() -> None:
    # Wilkinson, The Algebraic Eigenvalue Problem, 1965, p. 309 (page from memory): the two largest agree to 7·10⁻¹⁴.
    factors = sb.iterate(tridiagonal(np.ones(20), np.abs(np.arange(-10, 11)), np.ones(20))).factors()
    second, first = np.sort(factors.eigenvalues.real)[-2:]
    rounding = 21 * ULP * first
    assert abs(first - 10.746194182903393) < rounding
    assert abs(second - (10.746194182903393 - 7.16e-14)) < rounding
    assert factors.certificate().condition.max() < 1.01  # symmetric: 1, but for rounding between such neighbours


@pytest.mark.parametrize("n", [10, 17])
def test_clement_has_integer_eigenvalues(n: int) -> None:
    # Clement, SIAM Review 1, 1959: ±(n−1), ±(n−3), …
    k = np.arange(1.0, n)
    factors = sb.iterate(tridiagonal(k, np.zeros(n), k[::-1])).factors()
    within_conditioning(factors, np.arange(-(n - 1), n, 2.0))


def test_toeplitz_tridiagonal_in_closed_form() -> None:
    # b + 2√(ac) cos(kπ/(n+1)), for example Böttcher and Grudsky, Spectral Properties of Banded Toeplitz Matrices, 2005.
    n, a, b, c = 20, 2.0, -1.0, 0.5
    factors = sb.iterate(tridiagonal(np.full(n - 1, a), np.full(n, b), np.full(n - 1, c))).factors()
    within_conditioning(factors, b + 2 * np.sqrt(a * c) * np.cos(np.arange(1, n + 1) * np.pi / (n + 1)))


@pytest.mark.parametrize("form", ["real", "complex"])
def test_cyclic_permutation_gives_the_roots_of_unity(form: str) -> None:
    n = 12
    strategy = "francis" if form == "real" else "wilkinson"
    factors = sb.iterate(np.roll(np.eye(n), 1, axis=0), strategy=strategy, form=form).factors()
    within_conditioning(factors, np.exp(2j * np.pi * np.arange(n) / n))


@pytest.mark.parametrize("form", ["real", "complex"])
def test_spectrum_agrees_with_lapack(form: str) -> None:
    a = np.random.default_rng(7).standard_normal((40, 40))
    factors = sb.iterate(a, form=form).factors()
    t, _ = scipy.linalg.schur(a, output="complex")
    within_conditioning(factors, np.diagonal(t))
    if form == "real":
        pairs = factors.eigenvalues[np.flatnonzero(np.diagonal(factors.T, -1))]
        assert (pairs.imag > 0).all()


# Conditioning


def test_condition_numbers_agree_with_fifty_digits() -> None:
    a = frank(8)
    with mpmath.workdps(50):
        values, left, right = mpmath.eig(mpmath.matrix(a.tolist()), left=True, right=True)
        reference = []
        for k in range(8):
            y, x = left[k, :], right[:, k]
            s = abs((y * x)[0]) / (mpmath.norm(y) * mpmath.norm(x))
            reference.append(float(1 / s))
        spectrum = np.array([complex(value) for value in values])
    for form in ("real", "complex"):
        factors = sb.iterate(a, form=form).factors()
        order, _ = pair_spectra(factors.eigenvalues, spectrum)
        np.testing.assert_allclose(factors.certificate().condition, np.array(reference)[order], rtol=1e-8)


@pytest.mark.parametrize("form", ["real", "complex"])
@pytest.mark.parametrize("name", ["closedloop_carex15.npz", "kinetics_gri30.npz", "west0067.mtx"])
def test_condition_numbers_agree_with_lapack_eigenvectors(data: Path, name: str, form: str) -> None:
    factors = sb.iterate(data / name, form=form).factors()
    # dgeev on T itself, so that both speak about the same matrix; y and x come with unit norm.
    values, left, right = scipy.linalg.eig(factors.T, left=True, right=True)
    reference = 1 / np.abs(np.sum(left.conj() * right, axis=0))
    order, _ = pair_spectra(factors.eigenvalues, values)
    condition = factors.certificate().condition
    # An eigenvalue of condition κ carries vectors accurate to about κ·ulp‖T‖/sep; compare where that is small.
    simple = condition < 1e5
    assert simple.sum() > factors.n // 2
    np.testing.assert_allclose(condition[simple], reference[order][simple], rtol=1e-6)


def test_multiple_eigenvalues_have_legitimate_condition_numbers() -> None:
    np.testing.assert_array_equal(condition_numbers(3 * np.eye(4), "real"), np.ones(4))
    jordan = np.eye(40, k=1)
    assert np.isinf(condition_numbers(jordan, "real")).sum() >= 38  # both eigenvectors of the outermost rows still fit
    assert (condition_numbers(np.array([[1.0, 1.0], [0.0, 1.0]]), "real") > 1e15).all()
    assert condition_numbers(np.zeros((0, 0)), "real").size == 0


def test_separation_estimates_the_smallest_singular_value() -> None:
    a = np.random.default_rng(3).standard_normal((25, 25))
    factors = sb.iterate(a, form="complex").factors()
    certificate = factors.certificate()
    assert certificate.separation_reason == ""
    for row in range(0, 25, 6):
        t, _, _ = bring_to_top(factors.T, factors.Z, np.arange(25) == row)
        exact = np.linalg.svd(t[1:, 1:] - t[0, 0] * np.eye(24), compute_uv=False)[-1]
        # 1-norm and 2-norm differ by up to √n each way; the 1-norm estimate is rarely off by over 3 (Higham 1988).
        assert exact / 5 <= certificate.separation[row] <= 15 * exact
    both = sb.iterate(a, form="real").factors().certificate().separation
    order, _ = pair_spectra(sb.iterate(a, form="real").factors().eigenvalues, factors.eigenvalues)
    np.testing.assert_allclose(both, certificate.separation[order], rtol=0.5)


def test_separation_says_why_it_is_missing() -> None:
    sep, reason = separations(np.eye(251), "real")
    assert np.isnan(sep).all()
    assert "n > 250" in reason
    assert "no other eigenvalue" in separations(np.ones((1, 1)), "real")[1]


def test_conditioning_does_not_depend_on_units() -> None:
    a = np.random.default_rng(11).standard_normal((12, 12))
    plain = sb.iterate(a).factors().certificate()
    for exponent in (-1000, 900):
        scaled = sb.iterate(a * 2.0**exponent).factors().certificate()
        np.testing.assert_allclose(scaled.condition, plain.condition, rtol=1e-6)
        np.testing.assert_allclose(scaled.separation, plain.separation * 2.0**exponent, rtol=1e-6)
        np.testing.assert_allclose(scaled.rounding_movement, plain.rounding_movement * 2.0**exponent, rtol=1e-6)


# The certificate


def test_certificate_sees_a_changed_entry() -> None:
    a = np.random.default_rng(5).standard_normal((15, 15))
    factors = sb.iterate(a).factors()
    t, z = factors.T.copy(), factors.Z.copy()
    assert certify(a, t, z, "real").passed
    t[3, 9] += 1e-9
    changed = certify(a, t, z, "real")
    assert changed.backward_error > RATIO_LIMIT
    assert changed.structure
    assert not changed.passed
    z[:, 4] *= 1 + 1e-9
    assert certify(a, factors.T, z, "real").orthogonality > RATIO_LIMIT


def test_structure_is_exact_not_small() -> None:
    assert is_exact(np.array([[1.0, 5.0], [0.0, 2.0]]), "real")
    assert not is_exact(np.array([[1.0, 5.0], [1e-300, 2.0]]), "real")
    assert is_exact(np.array([[1.0, 5.0], [-1e-300, 1.0]]), "real")
    assert is_exact(np.array([[1.0, 5e-200], [-1e-200, 1.0]]), "real")  # the product underflows, the signs do not
    assert not is_exact(np.array([[1.0, 5.0], [-1.0, np.nextafter(1.0, 2.0)]]), "real")
    assert not is_exact(np.array([[1.0, 5.0], [2.0, 1.0]]), "real")
    assert not is_exact(np.array([[1.0, 5.0], [-1.0, 1.0]]).astype(complex), "complex")
    three = np.triu(np.ones((3, 3)))
    three[1, 0] = three[2, 1] = -1.0
    assert not is_exact(three, "real")
    three = np.triu(np.ones((3, 3)))
    three[2, 0] = 5e-324
    assert not is_exact(three, "real")


def test_certificate_is_json_ready_and_speaks() -> None:
    certificate = sb.iterate(np.diag(np.ones(29), 1)).factors().certificate()
    text = json.dumps(certificate.to_dict(), allow_nan=False)
    assert '"inf"' in text
    assert certificate.sentence.startswith("Passed: the backward error")
    assert set(certificate.summary()) < set(certificate.to_dict())


# Partial factors


def test_partial_factors_hold_and_say_what_is_missing(data: Path) -> None:
    whole = sb.iterate(data / "west0067.mtx").factors()
    run = sb.iterate(data / "west0067.mtx", limit=60)
    factors = run.factors()
    assert not factors.complete
    assert factors.unfinished
    certificate = factors.certificate()
    assert max(certificate.backward_error, certificate.orthogonality) < RATIO_LIMIT
    assert not certificate.structure
    assert not certificate.passed
    assert "still in Hessenberg form" in certificate.sentence
    missing = np.zeros(factors.n, dtype=bool)
    for lo, hi in factors.unfinished:
        missing[lo:hi] = True
        assert hi - lo > 1
    assert 0 < missing.sum() < factors.n
    np.testing.assert_array_equal(np.isnan(factors.eigenvalues), missing)
    np.testing.assert_array_equal(np.isnan(certificate.condition), missing)
    # What was found is found: values and condition numbers are those of the whole matrix.
    found = factors.eigenvalues[~missing]
    distance = np.abs(found[:, None] - whole.eigenvalues[None, :])
    partner = distance.argmin(axis=1)
    assert (distance.min(axis=1) <= 67 * 20 * whole.certificate().rounding_movement[partner]).all()
    np.testing.assert_allclose(certificate.condition[~missing], whole.certificate().condition[partner], rtol=1e-6)
    assert "not found yet" in factors.trust
    with pytest.raises(sb.SettingsError, match="only finished factors can be reordered"):
        factors.reorder("left-half-plane")
    json.dumps(factors.to_dict(), allow_nan=False)


def test_a_last_block_is_solved_directly_and_that_is_said() -> None:
    # One sweep is allowed and nothing but a 2×2 block is left to do in complex arithmetic.
    a = np.array([[1.0, 2.0], [3.0, 4.0]])
    run = sb.iterate(a, strategy="zero", form="complex", limit=1)
    assert not run.converged
    factors = run.factors()
    assert factors.complete
    assert factors.certificate().passed
    assert factors.notes == ("1 2×2 block left by the stopped run solved directly.",)


@pytest.mark.parametrize("limit", [1, 40])
def test_partial_factors_of_a_scaled_run_hold_for_the_loaded_matrix(data: Path, limit: int) -> None:
    factors = sb.iterate(data / "impcol_a.mtx", balance="both", limit=limit).factors()
    assert not factors.complete
    assert max(factors.certificate().backward_error, factors.certificate().orthogonality) < RATIO_LIMIT
    assert not np.tril(factors.T, -2).any()
    assert "stopped early" in factors.notes[0]
    assert ".scaled" in factors.trust


def test_factors_need_z() -> None:
    run = sb.iterate(frank(5), accumulate=False)
    with pytest.raises(sb.SettingsError, match="accumulate"):
        run.factors()


# Scaling


@pytest.mark.parametrize("name", ["kinetics_gri30.npz", "companion_cluster20.npz", "impcol_a.mtx"])
@pytest.mark.parametrize("strategy", ["francis", "wilkinson"])
def test_scaled_pair_belongs_to_the_scaled_matrix(data: Path, name: str, strategy: str) -> None:
    factors = sb.iterate(data / name, strategy=strategy, balance="both").factors()
    scaled = factors.scaled
    assert scaled is not None
    assert (scaled.D != 1).any()
    np.testing.assert_array_equal(scaled.D, 2.0 ** np.round(np.log2(scaled.D)))
    balanced = factors.matrix.array / scaled.D[:, None] * scaled.D
    assert residual_ratio(balanced, scaled.Z, scaled.T) < RATIO_LIMIT
    assert orthogonality_ratio(scaled.Z) < RATIO_LIMIT
    assert factors.certificate().passed


def test_scaled_pair_is_trusted_where_it_is_better(data: Path) -> None:
    # Certified eigenvalues of the ignition Jacobian; balancing shrinks its norm 10⁴-fold.
    factors = sb.iterate(data / "kinetics_gri30.npz", balance="both").factors()
    assert factors.scaled is not None
    exact = np.array([v for v, _, k in certified(data / "certified" / "kinetics_gri30.json") for _ in range(k)])
    own = pair_spectra(factors.eigenvalues, exact)[1]
    scaled = pair_spectra(factors.scaled.eigenvalues, exact)[1]
    assert scaled.max() < own.max() / 10
    assert "Trust the eigenvalues of the scaled pair" in factors.trust
    assert "licensed" in factors.trust


# Units at both ends of the range


@pytest.mark.parametrize("exponent", [-1020, -600, 600, 1015])
def test_extreme_units(exponent: int) -> None:
    a = np.random.default_rng(2).standard_normal((10, 10))
    plain, extreme = sb.iterate(a).factors(), sb.iterate(a * 2.0**exponent).factors()
    assert extreme.certificate().passed
    np.testing.assert_allclose(extreme.eigenvalues, plain.eigenvalues * 2.0**exponent, rtol=1e-9)


def test_factor_beyond_the_range_is_refused() -> None:
    a = np.full((20, 20), 1.7e308)
    with pytest.raises(sb.InputError, match="exceeds the range"):
        sb.iterate(a).factors()


def test_blocks_whose_upper_entry_vanished_are_repaired() -> None:
    t = np.array([[2.0, 0.0, 3.0], [5e-324, 2.0, 4.0], [0.0, 0.0, 1.0]])
    z = np.eye(3)
    before = t.copy()
    restore_underflowed_blocks(t, z)
    assert is_exact(t, "real")
    np.testing.assert_array_equal(z @ z.T, np.eye(3))
    np.testing.assert_array_equal(z @ t @ z.T, before)


def test_isolated_blocks_are_solved() -> None:
    t = np.array([[1.0, 2.0, 3.0, 4.0], [1.0, 5.0, 6.0, 7.0], [0.0, 0.0, 1.0, -9.0], [0.0, 0.0, 4.0, 3.0]])
    z, before = np.eye(4), t.copy()
    expected = np.linalg.eigvals(t)
    solve_small_blocks(t, z, "real")
    assert is_exact(t, "real")
    assert residual_ratio(before, z, t) < RATIO_LIMIT
    assert pair_spectra(eigenvalues_of(t, "real"), expected)[1].max() < 1e-13


# Reordering


@pytest.mark.parametrize("form", ["real", "complex"])
def test_left_half_plane_first_as_lapack_counts_it(form: str) -> None:
    a = np.random.default_rng(21).standard_normal((30, 30))
    factors = sb.iterate(a, form=form).factors().reorder("left-half-plane")
    _, _, count = scipy.linalg.schur(a, output=form, sort="lhp")
    assert (factors.eigenvalues[:count].real < 0).all()
    assert (factors.eigenvalues[count:].real >= 0).all()
    assert factors.refused == ()
    assert factors.selection == "left-half-plane"
    assert factors.certificate().passed
    # The leading columns of Z span the stable invariant subspace.
    basis = factors.Z[:, :count]
    residual = a @ basis - basis @ (basis.conj().T @ a @ basis)
    assert np.linalg.norm(residual) < 30 * RATIO_LIMIT * ULP * np.linalg.norm(a)


def test_unit_disc_predicates_and_indices_agree() -> None:
    a = np.random.default_rng(22).standard_normal((20, 20)) / 4
    factors = sb.iterate(a).factors()
    named = factors.reorder("unit-disc")
    inside = int((np.abs(factors.eigenvalues) < 1).sum())
    assert 0 < inside < 20
    assert (np.abs(named.eigenvalues[:inside]) < 1).all()
    scalar = factors.reorder(lambda value: bool(value.real**2 + value.imag**2 < 1))
    whole = factors.reorder(lambda values: np.abs(values) < 1)
    rows = factors.reorder(np.flatnonzero(np.abs(factors.eigenvalues) < 1).tolist())
    flags = factors.reorder((np.abs(factors.eigenvalues) < 1).tolist())
    for other in (scalar, whole, rows, flags):
        assert other.T.tobytes() == named.T.tobytes()
        assert other.Z.tobytes() == named.Z.tobytes()
    assert scalar.selection == "predicate"
    assert rows.selection == "rows"


def test_pairs_move_as_a_whole_and_that_is_said() -> None:
    a = np.random.default_rng(23).standard_normal((14, 14))
    factors = sb.iterate(a).factors()
    first = int(np.flatnonzero(np.diagonal(factors.T, -1))[-1])
    moved = factors.reorder([first + 1])
    value = factors.eigenvalues[first]
    np.testing.assert_allclose(moved.eigenvalues[:2], [value, value.conjugate()], rtol=1e-10)
    assert "1 complex pair chosen by one member" in moved.notes[-1]
    assert moved.certificate().passed
    alone = sb.iterate(a, form="complex").factors()
    one = alone.reorder([13])
    np.testing.assert_allclose(one.eigenvalues[0], alone.eigenvalues[13], rtol=1e-10)
    assert one.notes == ()


def test_nothing_and_everything_can_be_chosen() -> None:
    factors = sb.iterate(frank(6)).factors()
    assert factors.reorder([]).T.tobytes() == factors.T.tobytes()
    assert factors.reorder(lambda values: np.ones(values.shape, dtype=bool)).certificate().passed


def test_refused_swaps_are_listed_and_the_rest_is_done() -> None:
    # Two nearly equal, strongly non-normal complex pairs, which LAPACK's dlaexc refuses to exchange when its own test
    # of the exchanged blocks fails (it depends on the last bits, hence several tries); and a third pair well apart.
    rng = np.random.default_rng(0)
    chosen = np.array([False, False, True, True, True, True])
    tries = 0
    for _ in range(400):
        upper, lower = 10.0 ** rng.integers(2, 7, size=2)
        t = np.zeros((6, 6))
        t[:2, :2] = [[1, upper], [-1 / upper, 1]]
        t[2:4, 2:4] = [[1 + 1e-7, lower], [-1 / lower, 1 + 1e-7]]
        t[4:, 4:] = [[-5, 2], [-2, -5]]
        t[:2, 2:4] = 100 * rng.integers(-9, 9, (2, 2))
        t[:4, 4:] = 1
        new_t, new_z, refused = bring_to_top(t, np.eye(6), chosen)
        assert residual_ratio(t, new_z, new_t) < RATIO_LIMIT
        assert orthogonality_ratio(new_z) < RATIO_LIMIT
        if not refused or abs(refused[0].selected - refused[0].blocker) > 0.1:
            continue
        tries += 1
        assert len(refused) == 1
        np.testing.assert_allclose(eigenvalues_of(new_t, "real")[:2], [-5 + 2j, -5 - 2j], rtol=1e-4)
    assert tries > 0


def test_refused_swaps_reach_the_user(monkeypatch: pytest.MonkeyPatch) -> None:
    from schurbench.factors import core
    from schurbench.factors.reorder import RefusedSwap

    def refuse(t: Any, z: Any, chosen: Any) -> Any:
        return np.array(t), np.array(z), [RefusedSwap(1 + 0j, 1 + 1e-15j)]

    monkeypatch.setattr(core, "bring_to_top", refuse)
    factors = sb.iterate(frank(6)).factors().reorder([3])
    assert factors.refused[0].selected == 1
    assert "refused by LAPACK" in factors.notes[-1]
    assert factors.to_dict()["refused"] == [{"selected": [1.0, 0.0], "blocker": [1.0, 1e-15]}]


def test_eigenvalues_on_the_boundary_are_pointed_out(data: Path) -> None:
    # A gyroscopic system: every eigenvalue is purely imaginary (Wei and Kao 2000), so no side is determined.
    factors = sb.iterate(data / "gyro_wiresaw50.npz").factors().reorder("left-half-plane")
    assert any("can put 50 eigenvalues onto the imaginary axis" in note for note in factors.notes)
    assert any("licensed" in note for note in factors.notes)


def grcar(n: int) -> np.ndarray:
    """Grcar's Toeplitz matrix, a standard example of pseudospectra far from the spectrum (Trefethen & Embree 2005)."""
    return np.triu(np.tril(np.ones((n, n)), 3)) - np.diag(np.ones(n - 1), -1)


@pytest.mark.parametrize("form", ["real", "complex"])
def test_distances_are_smallest_singular_values(form: str) -> None:
    # Against LAPACK's gesdd on the matrix itself.
    a = grcar(40)
    t = sb.iterate(a, form=form).factors().T
    points = np.array([0.0, 1j, 0.5 + 2j, -1.0, 3.0 + 0.1j])
    expected = [scipy.linalg.svdvals(a - z * np.eye(40))[-1] for z in points]
    np.testing.assert_allclose(distances_to_spectrum_at(points, t, form), expected, rtol=0.1)


def test_a_cluster_far_from_the_axis_does_not_alarm() -> None:
    # To first order rounding moves the members of the canal's clusters over the axis; in truth it cannot bring any
    # eigenvalue near it, as LAPACK's singular values along the axis show.
    a = sb.demo_matrix().array
    factors = sb.iterate(a).factors()
    assert (np.abs(factors.eigenvalues.real) < factors.certificate().rounding_movement).sum() > 20
    frequencies = np.unique(np.r_[np.abs(factors.eigenvalues.imag), np.linspace(0.0, 70.0, 71)])
    nearest = min(scipy.linalg.svdvals(a - 1j * w * np.eye(a.shape[0]))[-1] for w in frequencies)
    assert nearest > 1e4 * ULP * np.linalg.norm(a)
    assert "not determined" not in factors.trust
    assert "beyond 4.5·10¹⁵" in factors.trust
    assert not any("determined" in note for note in factors.reorder("left-half-plane").notes)


def test_a_defective_eigenvalue_on_the_axis_does() -> None:
    jordan = np.diag(np.full(3, 1.0), 1)
    q = scipy.linalg.qr(np.random.default_rng(1).standard_normal((4, 4)))[0]
    assert "can put 4 eigenvalues onto the imaginary axis" in sb.iterate(q @ jordan @ q.T).factors().trust


@pytest.mark.parametrize("factor", [1e-305, 1e-300, 1e300])
def test_extreme_factors_can_be_reordered(factor: float) -> None:
    a = np.random.default_rng(5).standard_normal((8, 8))
    factors = sb.iterate(factor * a).factors().reorder("left-half-plane")
    assert factors.certificate().passed
    left = (factors.eigenvalues.real < 0.0).tolist()
    assert left == sorted(left, reverse=True)
    assert sum(left) == np.count_nonzero(np.linalg.eigvals(a).real < 0.0)


@pytest.mark.parametrize(
    ("selection", "message"),
    [
        ("right", "region 'right' is unknown"),
        ([6], "index 6 is not a row"),
        ([-1], "index -1 is not a row"),
        ([0.5], "whole numbers"),
        (lambda value: "yes", "True or False"),
    ],
)
def test_senseless_selections_are_refused(selection: Any, message: str) -> None:
    with pytest.raises(sb.SettingsError, match=message):
        sb.iterate(frank(6)).factors().reorder(selection)


# Small, degenerate, arbitrary


@pytest.mark.parametrize("a", [np.zeros((1, 1)), np.array([[-2.5]]), np.zeros((6, 6)), np.eye(3), 1j * np.eye(2)])
def test_degenerate_matrices(a: np.ndarray) -> None:
    factors = sb.iterate(a).factors()
    assert factors.certificate().passed
    np.testing.assert_array_equal(np.sort_complex(factors.eigenvalues), np.sort_complex(np.diagonal(a)))
    np.testing.assert_array_equal(factors.certificate().condition, np.ones(a.shape[0]))
    assert factors.reorder("left-half-plane").certificate().passed
    json.dumps(factors.to_dict(), allow_nan=False)


def test_arrays_are_write_protected() -> None:
    factors = sb.iterate(frank(6), balance="scale").factors()
    for array in (factors.T, factors.Z, factors.eigenvalues, factors.certificate().condition):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 0


ENTRIES = st.one_of(st.just(0.0), st.integers(-3, 3).map(float), st.floats(-1e3, 1e3, allow_subnormal=False))


@given(
    hnp.arrays(np.float64, st.integers(1, 7).map(lambda n: (n, n)), elements=ENTRIES),
    st.sampled_from(["real", "complex"]),
)
def test_any_small_matrix_gets_factors_that_pass(a: np.ndarray, form: str) -> None:
    run = sb.iterate(a, form=form)
    factors = run.factors()
    assert max(factors.certificate().backward_error, factors.certificate().orthogonality) < RATIO_LIMIT
    assert factors.certificate().structure == run.converged == factors.complete
    if factors.complete:
        assert factors.reorder("left-half-plane").certificate().passed


def test_pairing_is_the_best_of_all_permutations() -> None:
    from itertools import permutations

    rng = np.random.default_rng(1)
    for _ in range(5):
        a = rng.standard_normal(5) + 1j * rng.standard_normal(5)
        b = a[rng.permutation(5)] + 0.5 * rng.standard_normal(5)
        order, distance = pair_spectra(a, b)
        best = min(np.abs(a - b[list(p)]).sum() for p in permutations(range(5)))
        assert distance.sum() == pytest.approx(best)
        np.testing.assert_array_equal(distance, np.abs(a - b[order]))
    with pytest.raises(ValueError, match="cannot be paired"):
        pair_spectra([1.0], [1.0, 2.0])
    with pytest.raises(ValueError, match="finite"):
        pair_spectra([np.nan], [1.0])
