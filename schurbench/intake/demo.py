"""The demonstration plant: a branch canal of identical reaches, each kept at level by its own gate."""

from __future__ import annotations

from dataclasses import dataclass
from math import inf, sqrt

import numpy as np
import numpy.typing as npt

from schurbench.errors import SettingsError
from schurbench.intake.matrix import WorkingMatrix

__all__ = ["DEMO_STORY", "STATES_PER_REACH", "CanalReach", "demo_matrix"]

STATES_PER_REACH = 8
_LEAST_SUPPLY = 3
_SMALLEST, _LARGEST = 20, 1000
_GRAVITY = 9.81
_HOUR = 3600.0  # seconds in the time unit of the state matrix
_STATES = (
    "upper level",
    "middle level",
    "lower level",
    "upper flow",
    "lower flow",
    "stilling well level",
    "level integral",
    "gate opening",
)


@dataclass(frozen=True, slots=True)
class CanalReach:
    """One reach with its gate and controller; the values are typical of a small branch canal, and invented.

    Attributes
    ----------
    length, width, depth : float
        Length of the reach, width of its rectangular section, uniform depth, in m.
    slope : float
        Bed slope.
    manning : float
        Manning's roughness coefficient in s/m^(1/3); 0.025 is an earth canal in fair condition.
    opening : float
        Gate opening at the operating point, in %.
    drop : float
        Head loss over the gate in m; it counts for submerged gates only.
    gate_lag : float
        Time constant of the gate drive in s.
    well_lag : float
        Time constant of the stilling well in which the level is measured, in s.
    gain : float
        Proportional gain in % of opening per mm of level.
    reset : float
        Reset time of the integral action in s.
    supply_lag : float
        Residence time of one section of the supply channel in s.
    """

    length: float = 1000.0
    width: float = 2.0
    depth: float = 1.0
    slope: float = 2e-4
    manning: float = 0.025
    opening: float = 40.0
    drop: float = 0.2
    gate_lag: float = 60.0
    well_lag: float = 120.0
    gain: float = 0.12
    reset: float = 3600.0
    supply_lag: float = 900.0

    @property
    def velocity(self) -> float:
        """Uniform flow velocity by Manning's formula, in m/s."""
        radius = self.width * self.depth / (self.width + 2 * self.depth)
        return float(radius ** (2 / 3) * sqrt(self.slope) / self.manning)

    @property
    def flow(self) -> float:
        """Flow at the operating point, in m³/s."""
        return self.velocity * self.width * self.depth

    def check(self) -> None:
        """Refuse values for which the linear model does not hold.

        Raises
        ------
        SettingsError
        """
        for name in self.__dataclass_fields__:
            if not 0 < getattr(self, name) < inf:
                raise SettingsError(f"canal reach: {name} is {getattr(self, name)}; it must be a positive number")
        if self.velocity >= sqrt(_GRAVITY * self.depth):
            raise SettingsError(
                "canal reach: the uniform flow is not subcritical; take a smaller slope or a rougher bed"
            )


DEMO_STORY = (
    "A branch canal feeds a chain of identical reaches. Each reach is kept at level by the gate at its end, which a "
    "local controller opens when the water stands too high: a disturbance runs from gate to gate down the canal. "
    "Levels are in mm, flows in m³/s, openings in %, controller sums in mm·s, supply bookings in m³/h, and time in "
    "hours, as such models are kept in practice. That makes three difficulties by itself: mixed units scale rows "
    "and columns badly, identical reaches in a row repeat every eigenvalue without giving it new eigenvectors, and "
    "one-way flow of cause leaves the matrix in blocks that the ordering of the states hides. The values are "
    "typical and invented; do not judge a real canal's stability by them."
)


def demo_matrix(n: int = 83, *, gates: str = "free", reach: CanalReach | None = None) -> WorkingMatrix:
    """State matrix of a controlled canal, x' = A x with time in hours.

    Parameters
    ----------
    n : int
        Number of states, 20 to 1000. Every reach takes `STATES_PER_REACH` = 8; what is left over, three to ten
        states, are sections of the supply channel. The default gives ten reaches and three sections.
    gates : {"free", "submerged"}
        Free flow under the gates depends on the level above them only, so that causes travel one way, downstream.
        Submerged gates also feel the level below, which couples neighbours both ways.
    reach : CanalReach, optional
        Physical values, the same for every reach.

    Returns
    -------
    WorkingMatrix
        (n, n) float64, with labels such as ``"reach 3 lower level"``. Nothing is random.

    Raises
    ------
    SettingsError
        When n is not a whole number from 20 to 1000, ``gates`` is unknown or the reach is not physical.

    Notes
    -----
    *Water.* The Saint-Venant equations of a rectangular channel are linearised about uniform flow (velocity V, wave
    celerity c = √(g·depth), width B, slope S, Manning friction):

        B ∂h/∂t + ∂q/∂x = 0
        ∂q/∂t + 2V ∂q/∂x + (c² − V²) B ∂h/∂x + (2gS/V) q − g B S (1 + κ) h = 0,    κ = 7/3 − (4/3) (A/B) P'/P

    with section A, wetted perimeter P and P' = dP/d(depth); these are the equations of Litrico and Fromion, Modeling
    and Control of Hydrosystems, Springer 2009 (from memory; derived anew here). A staggered grid of three levels and
    two flows, with central differences, carries them; the gates at both ends give the boundary flows. *Gates* follow
    Q ∝ opening · √head, linearised; a motor drives them with a first-order lag. *Control* is proportional and
    integral on the level at the reach's lower end, measured in a stilling well (a lag): local upstream control.
    *Supply* is a row of linear reservoirs above the first reach.

    With free gates A is block lower triangular, and its exact eigenvalues are the eight of one reach, each as many
    times as there are reaches, and −3600/supply_lag for the supply sections. All of them lie in the left half-plane.
    What it does to an algorithm, measured with LAPACK through scipy 1.17 (n = 20, 83, 300, 1000; free gates):

    - Balancing shrinks the Frobenius norm 54 to 55-fold (submerged: 57, 63, 65, 66-fold).
    - Departure from normality (Henrici), relative to the norm: 0.9999; after balancing still 0.82 (submerged: 0.70 to
      0.77).
    - Every eigenvalue is defective, in chains as long as the canal. Computed eigenvalues are off by up to 2·10⁻⁶,
      0.3, 5 and 15 per hour, although each backward error is of rounding size; median condition number after
      balancing 2·10⁸ at n = 20 and above 10¹² from n = 83 (submerged: 18, 35, 5·10³, 4·10¹¹).
    - The slowest mode decays with 1.089 per hour at every n; LAPACK reports 1.089, 1.07, 0.986 and 0.4.
    - Numbering the same states from the tail to the head makes A block upper triangular. The Hessenberg reduction then
      keeps the blocks apart, and every eigenvalue is right to 10⁻¹² at every n.

    .. caution:: This is why the plant is here: a stability margin read off computed eigenvalues can be far from the
       truth when they are ill-conditioned. Judge the safety of a real plant with licensed engineering practice, never
       by this model.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or not _SMALLEST <= n <= _LARGEST:
        raise SettingsError(f"the canal has {_SMALLEST} to {_LARGEST} states; n was {n!r}")
    if gates not in ("free", "submerged"):
        raise SettingsError(f"gates are 'free' or 'submerged', not {gates!r}")
    reach = CanalReach() if reach is None else reach
    reach.check()
    array, labels = _assemble(int(n), gates == "submerged", reach)
    return WorkingMatrix(
        array, name=f"canal{n}", source=f"demonstration canal, {n} states, {gates} gates", labels=labels
    )


def _assemble(n: int, submerged: bool, reach: CanalReach) -> tuple[npt.NDArray[np.float64], tuple[str, ...]]:
    reaches = (n - _LEAST_SUPPLY) // STATES_PER_REACH
    supply = n - reaches * STATES_PER_REACH
    a = np.zeros((n, n))
    labels = [f"supply section {section + 1} flow" for section in range(supply)]
    # Linear reservoirs in a row, booked in m³/h as a water office does.
    rate = _HOUR / reach.supply_lag
    a[range(supply), range(supply)] = -rate
    a[range(1, supply), range(supply - 1)] = rate
    inflow = np.zeros(n)
    inflow[supply - 1] = 1 / _HOUR
    for number in range(reaches):
        first = supply + number * STATES_PER_REACH
        below = first + STATES_PER_REACH if submerged and number + 1 < reaches else None
        inflow = _fill_reach(a, first, inflow, below, reach.drop if submerged else reach.depth, reach)
        labels += [f"reach {number + 1} {state}" for state in _STATES]
    return a, tuple(labels)


def _fill_reach(
    a: npt.NDArray[np.float64],
    first: int,
    inflow: npt.NDArray[np.float64],
    below: int | None,
    head: float,
    reach: CanalReach,
) -> npt.NDArray[np.float64]:
    """Write the rows of one reach; return its outflow in m³/s as a row over all states: the inflow of the next."""
    unit = np.eye(a.shape[0])[first : first + STATES_PER_REACH]
    levels, (well, total, opening) = 1e-3 * unit[0:3], unit[5:8]  # levels in m here, as the equations want them
    outflow: npt.NDArray[np.float64] = reach.flow / reach.opening * opening + reach.flow / (2 * head) * levels[2]
    if below is not None:
        outflow[below] -= reach.flow / (2 * head) * 1e-3
    flows = [inflow, unit[3], unit[4], outflow]

    step, width, slope, speed = reach.length / 3, reach.width, reach.slope, reach.velocity
    kappa = 7 / 3 - 8 * reach.depth / (3 * (width + 2 * reach.depth))
    for cell in range(3):
        a[first + cell] = _HOUR * 1e3 / (width * step) * (flows[cell] - flows[cell + 1])
    for face in (1, 2):
        a[first + 2 + face] = _HOUR * (
            -2 * speed * (flows[face + 1] - flows[face - 1]) / (2 * step)
            - (_GRAVITY * reach.depth - speed**2) * width * (levels[face] - levels[face - 1]) / step
            - 2 * _GRAVITY * slope / speed * flows[face]
            + _GRAVITY * width * slope * (1 + kappa) * (levels[face] + levels[face - 1]) / 2
        )
    a[first + 5] = _HOUR / reach.well_lag * (unit[2] - well)
    a[first + 6] = _HOUR * well
    a[first + 7] = _HOUR / reach.gate_lag * (reach.gain * (well + total / reach.reset) - opening)
    return outflow
