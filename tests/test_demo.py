"""The demonstration canal against hydraulics, exact algebra and LAPACK: it has the ailments its description claims."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
import scipy.linalg
import scipy.sparse
from scipy.optimize import linear_sum_assignment
from scipy.sparse.csgraph import connected_components

import schurbench as sb
from schurbench.intake.demo import DEMO_STORY, STATES_PER_REACH, CanalReach

FIRST = 3
"""Index of the first reach's first state at the default n = 83."""


def blocks(n: int) -> tuple[np.ndarray, int, int]:
    """The block of one reach, the number of reaches, the number of supply sections."""
    a = sb.demo_matrix(n).array
    reaches = (n - 3) // STATES_PER_REACH
    supply = n - reaches * STATES_PER_REACH
    return a[supply : supply + STATES_PER_REACH, supply : supply + STATES_PER_REACH], reaches, supply


def exact_eigenvalues(n: int) -> np.ndarray:
    """Those of one reach, repeated, and the supply rate: A is block triangular with equal blocks."""
    block, reaches, supply = blocks(n)
    return np.concatenate([np.repeat(np.linalg.eigvals(block), reaches), np.full(supply, -4.0)])


def distance(computed: np.ndarray, exact: np.ndarray) -> float:
    """Largest distance in the best pairing of two spectra."""
    cost = np.abs(computed[:, None] - exact[None, :])
    return float(cost[linear_sum_assignment(cost)].max())


@pytest.mark.parametrize("gates", ["free", "submerged"])
@pytest.mark.parametrize("n", [*range(20, 36), 83, 300, 1000])
def test_every_n_gives_n_named_states(n: int, gates: str) -> None:
    m = sb.demo_matrix(n, gates=gates)
    assert m.array.shape == (n, n)
    assert m.is_real
    assert not m.array.flags.writeable
    assert np.isfinite(m.array).all()
    assert m.labels is not None
    assert len(set(m.labels)) == n
    assert m.labels[0] == "supply section 1 flow"
    assert m.labels[-1] == f"reach {(n - 3) // 8} gate opening"
    assert sb.demo_matrix(n, gates=gates).sha256 == m.sha256
    assert np.abs(m.array).sum(axis=0).all(), "every state acts on something"


def test_settings_that_make_no_canal() -> None:
    for n in (19, 1001, 83.0, "83", True, None):
        with pytest.raises(sb.SettingsError, match="20 to 1000"):
            sb.demo_matrix(n)  # type: ignore[arg-type]
    with pytest.raises(sb.SettingsError, match="'free' or 'submerged'"):
        sb.demo_matrix(gates="open")
    with pytest.raises(sb.SettingsError, match="depth is 0"):
        sb.demo_matrix(reach=CanalReach(depth=0))
    with pytest.raises(sb.SettingsError, match="positive"):
        sb.demo_matrix(reach=CanalReach(gain=float("nan")))
    with pytest.raises(sb.SettingsError, match="not subcritical"):
        sb.demo_matrix(reach=CanalReach(slope=0.05, manning=0.012))


def test_the_story_is_one_paragraph_with_its_caution() -> None:
    assert "\n" not in DEMO_STORY
    assert "invented" in DEMO_STORY
    assert "stability" in DEMO_STORY


# --- hydraulics -----------------------------------------------------------------------------------------------


def friction_slope(flow: float, depth: float, reach: CanalReach) -> float:
    """Manning's formula for the friction slope (Chow, Open-Channel Hydraulics, 1959, chapter 5; common practice)."""
    area, perimeter = reach.width * depth, reach.width + 2 * depth
    return float(flow * abs(flow) * reach.manning**2 * perimeter ** (4 / 3) / area ** (10 / 3))


def test_the_operating_point_is_uniform_flow() -> None:
    reach = CanalReach()
    assert friction_slope(reach.flow, reach.depth, reach) == pytest.approx(reach.slope, rel=1e-12)


def test_a_reach_responds_as_the_saint_venant_equations_do() -> None:
    """Levels after a change of inflow, gate closed: the grid against the exact solution of the linear equations.

    The equations are linearised here by differencing Manning's formula, not with the coefficients of the module; in the
    frequency domain they are two ordinary equations along the canal, which a matrix exponential solves.
    """
    reach = CanalReach()
    flow, depth, width, g = reach.flow, reach.depth, reach.width, 9.81
    speed, area = flow / (width * depth), width * depth
    d = 1e-6
    by_flow = (friction_slope(flow * (1 + d), depth, reach) - friction_slope(flow * (1 - d), depth, reach)) / (
        2 * d * flow
    )
    by_depth = (friction_slope(flow, depth + d, reach) - friction_slope(flow, depth - d, reach)) / (2 * d)

    def exact(s: complex, place: float) -> complex:
        stiffness = (g * depth - speed**2) * width
        along = np.array(
            [
                [0, -width * s],
                [-(s + g * area * by_flow) / stiffness, (2 * speed * width * s - g * area * by_depth) / stiffness],
            ]
        )
        whole = scipy.linalg.expm(along * reach.length)
        head = -whole[0, 0] / whole[0, 1]  # no outflow at the end
        part = scipy.linalg.expm(along * place)
        return complex(part[1, 0] + part[1, 1] * head)

    # Rows of the second reach; its gate's own dependence on the level is taken out, so that the end is closed.
    a = sb.demo_matrix(83).array
    first, step = FIRST + STATES_PER_REACH, reach.length / 3
    water = a[first : first + 5, first : first + 5].copy()
    by_level = flow / (2 * depth) * 1e-3
    water[2, 2] += 3600e3 / (width * step) * by_level
    water[4, 2] += 3600 * speed / step * by_level
    assert water[2, 2] == pytest.approx(0, abs=1e-12)
    inflow = np.array([3600e3 / (width * step), 0, 0, 3600 * speed / step, 0])
    for rate, tolerance in ((0.1, 0.003), (1.0, 0.003), (3.0, 0.006), (10.0, 0.03)):  # rad/h; the gates act below 2
        levels = np.linalg.solve(1j * rate * np.eye(5) - water, inflow.astype(complex))[:3]
        for cell, level in enumerate(levels):
            assert abs(level * 1e-3 / exact(1j * rate / 3600, (cell + 0.5) * step) - 1) < tolerance


@pytest.mark.parametrize("gates", ["free", "submerged"])
def test_a_lasting_change_of_supply_passes_through_every_reach(gates: str) -> None:
    """Water is conserved and control integrates: every flow comes to equal the supply, and every level comes back."""
    m = sb.demo_matrix(83, gates=gates)
    assert m.labels is not None
    push = np.zeros(83)
    push[0] = 4.0 * 36.0  # 36 m³/h or 0.01 m³/s more into the first supply section
    state = dict(zip(m.labels, np.linalg.solve(m.array, -push), strict=True))
    for number in range(1, 11):
        for place in ("upper flow", "lower flow"):
            assert state[f"reach {number} {place}"] == pytest.approx(0.01, rel=1e-9)
        assert state[f"reach {number} lower level"] == pytest.approx(0, abs=1e-9)
    if gates == "free":
        # The whole change is carried by the opening: 0.01 m³/s of the flow at 40 % opening.
        assert state["reach 7 gate opening"] == pytest.approx(40 * 0.01 / CanalReach().flow, rel=1e-9)


# --- what it does to an algorithm -----------------------------------------------------------------------------


@pytest.mark.parametrize("n", [20, 83, 300])
def test_reaches_are_identical_and_causes_travel_downstream(n: int) -> None:
    a = sb.demo_matrix(n).array
    block, reaches, supply = blocks(n)
    for number in range(reaches):
        first = supply + number * STATES_PER_REACH
        inside = slice(first, first + STATES_PER_REACH)
        assert np.array_equal(a[inside, inside], block)
        assert not a[inside, first + STATES_PER_REACH :].any()
    count, _ = connected_components(scipy.sparse.csr_array(a), connection="strong")
    assert count == reaches + supply
    both, _ = connected_components(
        scipy.sparse.csr_array(sb.demo_matrix(n, gates="submerged").array), connection="strong"
    )
    assert both == 1 + supply


def test_the_spectrum_is_that_of_one_reach_in_exact_arithmetic() -> None:
    """Characteristic and minimal polynomial with python-flint: every eigenvalue is a chain as long as the canal."""
    flint = pytest.importorskip("flint")

    def rational(a: np.ndarray) -> object:
        entries = [[flint.fmpq(*float(x).as_integer_ratio()) for x in row] for row in a]
        return flint.fmpq_mat(entries)

    def value(polynomial: object, a: object, n: int) -> object:
        result = flint.fmpq_mat(n, n)
        unit = flint.fmpq_mat([[int(i == j) for j in range(n)] for i in range(n)])
        for coefficient in reversed(polynomial.coeffs()):  # type: ignore[attr-defined]
            result = result * a + unit * coefficient
        return result

    n = 27
    block, reaches, supply = blocks(n)
    assert (reaches, supply) == (3, 3)
    whole, one = rational(sb.demo_matrix(n).array), rational(block)
    of_reach = one.charpoly()  # type: ignore[attr-defined]
    of_supply = flint.fmpq_poly([4, 1])
    assert whole.charpoly() == of_reach**3 * of_supply**3  # type: ignore[attr-defined]
    nothing = flint.fmpq_mat(n, n)
    # Of one irreducible factor, either all roots have a chain of full length or none has.
    assert len(of_reach.factor()[1]) == 1
    assert value(of_reach**2 * of_supply**3, whole, n) != nothing
    assert value(of_reach**3 * of_supply**2, whole, n) != nothing
    assert value(of_reach**3 * of_supply**3, whole, n) == nothing


def test_the_plant_is_stable_as_designed() -> None:
    flint = pytest.importorskip("flint")
    block, _, _ = blocks(83)
    with flint.ctx.workprec(200):
        values = flint.acb_mat([[flint.arb(float(x)) for x in row] for row in block]).eig()
        rightmost = max(float(value.real.upper()) for value in values)
    assert rightmost == pytest.approx(-1.0887427, rel=1e-6)
    np.testing.assert_allclose(np.linalg.eigvals(block).real.max(), rightmost, rtol=1e-10)
    for n in (20, 83, 300):
        assert np.linalg.eigvals(sb.demo_matrix(n, gates="submerged").array).real.max() < 0


@pytest.mark.parametrize("n", [20, 83, 300])
def test_mixed_units_scale_it_badly(n: int) -> None:
    for gates, low, high in (("free", 54, 55.5), ("submerged", 57, 66)):
        a = sb.demo_matrix(n, gates=gates).array
        balanced, _ = scipy.linalg.matrix_balance(a)
        assert low < np.linalg.norm(a) / np.linalg.norm(balanced) < high


@pytest.mark.parametrize("n", [20, 83])
def test_it_is_far_from_normal(n: int) -> None:
    for gates, least in (("free", 0.81), ("submerged", 0.70)):
        a = sb.demo_matrix(n, gates=gates).array
        balanced, _ = scipy.linalg.matrix_balance(a, permute=False)
        for matrix, bound in ((a, 0.9999), (balanced, least)):
            t, _ = scipy.linalg.schur(matrix, output="complex")
            assert np.linalg.norm(np.triu(t, 1)) / np.linalg.norm(matrix) > bound


def test_computed_eigenvalues_scatter_and_the_order_of_states_decides() -> None:
    exact = exact_eigenvalues(83)
    a = sb.demo_matrix(83).array
    assert 0.05 < distance(np.linalg.eigvals(a), exact) < 2
    # From tail to head the matrix is block upper triangular, and the reduction keeps the blocks apart.
    assert distance(np.linalg.eigvals(a[::-1, ::-1]), exact) < 1e-11
    h = scipy.linalg.hessenberg(a[::-1, ::-1])
    assert np.count_nonzero(np.diag(h, -1) == 0) == 10 + 3 - 1


def test_physical_values_can_be_changed() -> None:
    reach = dataclasses.replace(CanalReach(), length=500.0, gain=0.05)
    changed = sb.demo_matrix(83, reach=reach)
    assert changed.sha256 != sb.demo_matrix(83).sha256
    # Cells of half the length fill twice as fast.
    upper, flow = FIRST, FIRST + 3
    assert changed.array[upper, flow] == pytest.approx(2 * sb.demo_matrix(83).array[upper, flow])
