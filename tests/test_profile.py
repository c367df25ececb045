"""The profile against numpy, scipy.sparse.csgraph, hand-computed examples and published matrices."""

from __future__ import annotations

import json
from dataclasses import fields
from pathlib import Path

import numpy as np
import pytest
import scipy.io
import scipy.linalg
from scipy.sparse.csgraph import connected_components

import schurbench as sb
from schurbench.prepare import structure
from schurbench.prepare.estimate import estimate
from schurbench.prepare.plain import number, plain, ten_to

DATA = Path(__file__).parent / "data"


def stored(name: str) -> np.ndarray:
    """A matrix of tests/data, whose README names its source."""
    if name.endswith(".npz"):
        with np.load(DATA / name) as archive:
            return archive["A"]
    return scipy.io.mmread(DATA / name).toarray()


def gaussian(n: int, seed: int, complex_: bool = False) -> np.ndarray:
    rng = np.random.default_rng(seed)
    a = rng.standard_normal((n, n))
    return a + 1j * rng.standard_normal((n, n)) if complex_ else a


@pytest.mark.parametrize("complex_", [False, True])
@pytest.mark.parametrize("n", [1, 2, 7, 40])
def test_norms_agree_with_numpy(n: int, complex_: bool) -> None:
    a = gaussian(n, seed=n, complex_=complex_)
    p = sb.profile(a)
    assert p.norm_one == pytest.approx(np.linalg.norm(a, 1), rel=1e-14)
    assert p.norm_inf == pytest.approx(np.linalg.norm(a, np.inf), rel=1e-14)
    assert p.norm_frobenius == pytest.approx(np.linalg.norm(a), rel=1e-14)
    assert p.norm_max == pytest.approx(np.abs(a).max(), rel=1e-15)
    assert (p.n, p.real, p.dtype) == (n, not complex_, "complex128" if complex_ else "float64")


def test_norms_are_right_at_the_ends_of_the_number_range() -> None:
    a = gaussian(6, seed=3)
    for exponent in (-1000, 1000):
        p = sb.profile(np.ldexp(a, exponent))
        assert p.norm_frobenius == np.ldexp(sb.profile(a).norm_frobenius, exponent)
        assert p.departure == sb.profile(a).departure
        assert p.normal == sb.profile(a).normal


@pytest.mark.parametrize(
    "a",
    [
        np.zeros((1, 1)),
        np.array([[5.0]]),
        np.array([[2.0j]]),
        np.zeros((6, 6)),
        np.full((3, 3), 1.7e308),
        np.full((3, 3), 1.7e308 + 1.7e308j),
        np.diag([1e300, 1.0, 1e-300]) + 1e-5,
        gaussian(5, 1) * 1e-310,
        np.array([[0.0, 1e300], [1e-300, 0.0]]),
        np.array([[0.0, 5e-324], [1.7e308, 0.0]]),
    ],
)
def test_extreme_matrices_give_a_profile_without_a_warning(a: np.ndarray) -> None:
    p = sb.profile(a)
    text = json.dumps(p.to_dict(), allow_nan=False)
    assert set(json.loads(text)) == {field.name for field in fields(p)}
    assert all(sentence.endswith(".") for sentence in p.remarks)


def test_a_norm_beyond_double_precision_is_infinite_and_json_says_so() -> None:
    p = sb.profile(np.full((3, 3), 1.7e308))
    assert p.norm_one == np.inf
    assert p.norm_max == pytest.approx(1.7e308)
    assert p.to_dict()["norm_one"] == "inf"


def test_residuals_of_structures_held_exactly_and_broken_by_a_known_amount() -> None:
    g, z = gaussian(30, 5), gaussian(30, 6, complex_=True)
    q, u = np.linalg.qr(g)[0], np.linalg.qr(z)[0]
    assert sb.profile(g + g.T).symmetric == 0.0
    assert sb.profile(z + z.conj().T).hermitian == 0.0
    assert sb.profile(z + z.conj().T).symmetric > 0.1
    assert sb.profile(g - g.T).skew == 0.0
    assert sb.profile(z - z.conj().T).skew == 0.0
    for a in (q, u):
        p = sb.profile(a)
        assert p.orthogonal < 1e-14
        assert p.normal < 1e-15
        assert sb.profile(3.7 * a).orthogonal > 1.0
        assert sb.profile(3.7 * a).scaled_orthogonal < 1e-14
    # One entry moved by δ in a symmetric matrix: ‖A − Aᵀ‖ = √2·δ.
    bent = np.eye(10)
    bent[2, 7] += 1e-6
    assert sb.profile(bent).symmetric == pytest.approx(2**0.5 * 1e-6 / 10**0.5, rel=1e-6)


def test_structures_name_the_strongest_first() -> None:
    g = gaussian(12, 7)
    assert sb.profile(g + g.T).structures[0] == "symmetric"
    assert sb.profile(g - g.T).structures[0] == "skew-symmetric"
    assert sb.profile(np.linalg.qr(g)[0]).structures[0] == "orthogonal"
    assert sb.profile(np.triu(g)).structures == ("upper triangular",)
    assert sb.profile(scipy.linalg.hadamard(8)).structures[0] == "symmetric"
    assert sb.profile(g).structures == ()
    assert sb.profile(np.zeros((3, 3))).structures == ("zero",)


@pytest.mark.parametrize("b", [0.0, 1e-9, 0.5, 3.0, 1e5])
def test_departure_from_normality_by_hand(b: float) -> None:
    # [[1, b], [0, 2]] is its own Schur form: the departure is |b|, the norm √(5 + b²).
    p = sb.profile(np.array([[1.0, b], [0.0, 2.0]]))
    assert p.departure == pytest.approx(b / (5 + b * b) ** 0.5, rel=1e-12, abs=1e-16)
    # A real 2×2 with a complex pair, [[0, b], [−1, 0]]: |λ|² = b, so ‖A‖² − Σ|λ|² = b² + 1 − 2b.
    if b > 0.0:
        q = sb.profile(np.array([[0.0, b], [-1.0, 0.0]]))
        assert q.departure == pytest.approx(abs(b - 1) / (b * b + 1) ** 0.5, rel=1e-10, abs=1e-15)


@pytest.mark.parametrize("seed", range(12))
def test_commutator_bounds_hold_the_departure_from_eigenvalues(seed: int) -> None:
    n = 2 + 3 * seed
    a = gaussian(n, seed, complex_=bool(seed % 2))
    if seed % 3 == 0:
        a = np.triu(a, 1) * 10.0**seed + np.diag(np.diag(a))
    p = sb.profile(a)
    if seed % 3 == 0:
        # upper triangular: its own Schur form
        expected = np.linalg.norm(np.triu(a, 1)) / np.linalg.norm(a)
    else:
        squares = np.linalg.norm(a) ** 2 - (np.abs(np.linalg.eigvals(a)) ** 2).sum()
        expected = squares**0.5 / np.linalg.norm(a)
    assert p.departure == pytest.approx(expected, rel=1e-10)
    assert p.departure_lower <= p.departure * (1 + 1e-12)
    assert p.departure <= p.departure_upper * (1 + 1e-12)
    assert p.departure_source == "schur form"


def test_departure_is_left_to_its_bounds_where_a_schur_form_would_cost_a_run() -> None:
    p = sb.profile(gaussian(300, 1))
    assert p.departure is None
    assert p.departure_source == "bounds"
    assert 0.0 < p.departure_lower <= p.departure_upper <= 1.0


def test_strongly_connected_components_against_reachability_and_csgraph() -> None:
    rng = np.random.default_rng(11)
    for n in (1, 2, 9, 30, 60):
        pattern = rng.random((n, n)) < 1.3 / n
        a = np.where(pattern, rng.standard_normal((n, n)), 0.0)
        p = sb.profile(a)
        reach = np.linalg.matrix_power(pattern.astype(float) + np.eye(n), n) > 0
        classes = np.unique(reach & reach.T, axis=0)
        assert p.components == len(classes)
        assert p.component_sizes == tuple(sorted((int(c.sum()) for c in classes), reverse=True))
        assert p.components == connected_components(a != 0, directed=True, connection="strong")[0]


def test_isolated_range_of_a_matrix_permuted_by_hand() -> None:
    # Row 3 has only its diagonal entry, column 2 too: one eigenvalue leaves at either end, two rows stay.
    a = np.array([[1.0, 1e4, 0, 3], [1e-4, 2, 0, 1], [5, 6, 7, 8], [0, 0, 0, 9]])
    p = sb.profile(a)
    assert p.isolated == (1, 3)
    assert p.components == 3
    assert p.component_sizes == (2, 1, 1)


def test_balancing_factor_and_scale_factors() -> None:
    # D⁻¹ [[1, 2²⁰], [2⁻²⁰, 1]] D is all ones for D = diag(2²⁰, 1): the 1-norm falls from 1 + 2²⁰ to 2. LAPACK stops
    # scaling once a factor of 2 gains less than 5 %, so it may end one power of two short.
    p = sb.profile(np.array([[1.0, 2.0**20], [2.0**-20, 1.0]]))
    assert 0.6 * (1 + 2**20) / 2 < p.balance_factor < 1.01 * (1 + 2**20) / 2
    assert p.balance_decades == pytest.approx(20 * np.log10(2), abs=0.61)
    assert sb.profile(gaussian(40, 2)).balance_factor < 1.5
    a = gaussian(15, 8)
    wild = 10.0 ** np.random.default_rng(1).uniform(-6, 6, 15)
    spoiled = a / wild[:, None] * wild
    balanced = scipy.linalg.matrix_balance(spoiled, permute=False)[0]
    assert sb.profile(spoiled).balance_factor == np.linalg.norm(spoiled, 1) / np.linalg.norm(balanced, 1)
    assert structure.balancing(spoiled).log10_range == pytest.approx(np.ptp(np.log10(wild)), abs=1.5)


def test_kinetics_jacobian_is_badly_scaled_and_says_so_first() -> None:
    # tests/data/README.md: methane/air ignition (cantera); balancing shrinks its norm about 10⁴-fold.
    p = sb.profile(stored("kinetics_gri30.npz"))
    assert 1e3 < p.balance_factor < 1e5
    assert p.row_norm_decades > 8
    assert "balancing would shrink the 1-norm" in p.remarks[0]


def test_companion_matrix_of_wilkinsons_polynomial() -> None:
    # Companion matrices are Hessenberg; the coefficients of (x−1)…(x−20) reach 2.4·10¹⁸ = 20! (tests/data/README.md).
    p = sb.profile(stored("companion_wilkinson20.npz"))
    assert p.hessenberg
    assert p.triangular == "no"
    assert p.balance_factor > 1e12


def test_grading_trend() -> None:
    down = np.diag(10.0 ** -np.arange(12.0)) @ (np.ones((12, 12)) + np.eye(12))
    p, q = sb.profile(down), sb.profile(down[::-1, ::-1])
    assert p.grading_slope == pytest.approx(-1.0)
    assert p.grading_decades == pytest.approx(-11.0)
    assert p.grading_fit == pytest.approx(1.0)
    assert q.grading_decades == pytest.approx(11.0)
    assert any("flip=True" in sentence for sentence in q.remarks)
    assert not any("flip=True" in sentence for sentence in p.remarks)
    assert sb.profile(np.eye(5)).grading_decades == 0.0


def test_counts_and_bandwidth() -> None:
    a = scipy.linalg.toeplitz([2.0, -1.0, 0, 0, 0, 0], [2.0, -1.0, 3.0, 0, 0, 0])
    a[0, 0] = 3e-310
    p = sb.profile(a)
    assert (p.lower_bandwidth, p.upper_bandwidth) == (1, 2) == scipy.linalg.bandwidth(a)
    assert p.hessenberg
    assert p.subnormal == 1
    assert p.zeros == int((a == 0).sum())
    assert p.density == pytest.approx(1 - p.zeros / 36)
    assert sb.profile(a + 1j * a).subnormal == 2
    assert sb.profile(np.tril(np.ones((4, 4)))).triangular == "lower"
    assert sb.profile(np.eye(4)).triangular == "diagonal"


def test_row_remark_names_the_states() -> None:
    a = gaussian(4, 9)
    a[2] *= 1e7
    m = sb.load(a, labels=["gate", "level", "flow", "valve"])
    assert "largest: flow" in sb.profile(m).remarks[0]


def test_estimate_grows_with_order_and_complex_costs_more() -> None:
    for real in (True, False):
        times = [estimate(n, real=real).seconds for n in (1, 50, 200, 1000)]
        assert times == sorted(times)
        assert times[0] > 0.0
    assert estimate(300, real=False).seconds > estimate(300, real=True).seconds
    assert estimate(1000, real=True).memory > 4 * 8 * 1000**2


def test_numbers_in_sentences() -> None:
    assert number(1e-7) == "10⁻⁷"
    assert number(2.54e-7) == "2.54·10⁻⁷"
    assert number(-2.5e9) == "−2.5·10⁹"
    assert number(0.03456) == "0.0346"
    assert number(12.0) == "12"
    assert number(54321.0) == "54300"
    assert number(-1789.0) == "−1790"
    assert number(-0.25) == "−0.25"
    assert number(0.0) == "0"
    assert ten_to(400.2) == "10⁴⁰⁰"


def test_plain_values_survive_strict_json() -> None:
    value = {"a": np.float64(np.inf), "b": (np.int64(3), -np.inf, np.nan), "c": 1 + 2j, "d": np.arange(3), "e": None}
    assert json.loads(json.dumps(plain(value), allow_nan=False)) == {
        "a": "inf",
        "b": [3, "-inf", None],
        "c": [1.0, 2.0],
        "d": [0, 1, 2],
        "e": None,
    }
    with pytest.raises(TypeError):
        plain(object())
