"""What the panels show: pure functions from a run and a cursor to small float64 arrays and one sentence.

Logarithms, zeros, pooling and decimation are dealt with here; the widgets only show what these functions return.
Rows are rows of H, counted from 0; an entry h[row, row−1] is named by its ``row``. Steps are states: 0 is the
Hessenberg start, k the state after step k.
"""

from __future__ import annotations

from bisect import bisect_right
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from schurbench.journal.records import SPIKE
from schurbench.measures import ULP
from schurbench.panels.text import complex_number, rows
from schurbench.policy import deflation_test
from schurbench.prepare.plain import number, plural

if TYPE_CHECKING:
    from schurbench.journal import Deflation, Run, State

__all__ = [
    "CurvesView",
    "DeflationView",
    "MapView",
    "MatrixView",
    "SpectrumView",
    "TrackView",
    "curves_view",
    "deflation_sentence",
    "deflation_view",
    "finished_rows",
    "healthy_wait",
    "longest_wait",
    "looked_into",
    "magnitude_limits",
    "map_view",
    "matrix_view",
    "pool",
    "rounding_level",
    "row_name",
    "spectrum_limits",
    "spectrum_view",
    "subdiagonal_sentence",
    "ticks",
    "track_sentence",
    "track_view",
    "waited_row",
]

Floats = npt.NDArray[np.float64]

#: A picture has at most this many rows and columns; more cannot be told apart on the page.
PICTURE_SIDE = 256

#: Longest curve sent to the page.
CURVE_POINTS = 250


@dataclass(frozen=True, slots=True, eq=False)
class MatrixView:
    """Magnitudes of H at the cursor: ``level`` (p, p) is log10, the largest of each block, -inf for all-zero blocks.

    ``window`` is the active window, ``looked_into`` the deflation window of the step, both half-open and possibly empty.
    """

    level: Floats
    window: tuple[int, int]
    looked_into: tuple[int, int]
    sentence: str


@dataclass(frozen=True, slots=True, eq=False)
class MapView:
    """All subdiagonal magnitudes: ``level`` (p, q) is log10, positions down, states across, largest of each block."""

    level: Floats


@dataclass(frozen=True, slots=True, eq=False)
class CurvesView:
    """Histories of some subdiagonal entries.

    ``steps`` (s,) are the states shown; ``level`` (r, s) is log10 with NaN for zeros, one row for each entry of
    ``rows`` (r,); ``threshold`` (s,) is log10 of what the deflation test accepts for the first of them.
    """

    steps: Floats
    rows: tuple[int, ...]
    level: Floats
    threshold: Floats


@dataclass(frozen=True, slots=True, eq=False)
class DeflationView:
    """Every deflation by step and row, one (m, 2) array a kind.

    ``outline`` (s, 3) is the active window: state, first row, last row.
    """

    single: Floats
    pair: Floats
    split: Floats
    outline: Floats


@dataclass(frozen=True, slots=True, eq=False)
class SpectrumView:
    """Ritz values at the cursor as (m, 2) arrays of real and imaginary part, in the units of the loaded matrix."""

    active: Floats
    converged: Floats
    shifts: Floats
    chosen: Floats
    sentence: str


@dataclass(frozen=True, slots=True, eq=False)
class TrackView:
    """Sweeps waited at each step, pooled to at most 1200 columns, and the steps that stand out.

    ``edges`` (q+1,) bound the columns on the step axis, ``height`` (q,) is the longest wait in each. ``deflations``,
    ``exceptional`` (shifts) and ``windows`` (looked into, without a sweep) are steps. ``healthy`` is the longest wait
    of healthy runs, ``top`` where the axis ends.
    """

    edges: Floats
    height: Floats
    deflations: Floats
    exceptional: Floats
    windows: Floats
    healthy: float
    top: float


# --- magnitudes ---------------------------------------------------------------------------------------------------


def pool(values: Floats, shape: tuple[int, int]) -> Floats:
    """Largest value of each block when an array is cut into at most ``shape`` nearly equal blocks."""
    for axis, most in enumerate(shape):
        have = values.shape[axis]
        if have > most:
            edges = (np.arange(most) * have) // most
            values = np.maximum.reduceat(values, edges, axis=axis)
    return values


def _log10(magnitude: Floats) -> Floats:
    with np.errstate(divide="ignore"):
        return np.log10(magnitude)


def rounding_level(run: Run) -> float:
    """The level under which an entry is rounding noise beside H: ``tol`` where one was set, otherwise ulp·‖H‖."""
    tol = run.settings.tol
    level = tol if tol else ULP * run.norm
    return level if level > 0.0 else ULP


def magnitude_limits(run: Run) -> tuple[float, float]:
    """First and last level (log10) of the magnitude scale, from the rounding level to the norm; fixed over a run."""
    lo = float(np.log10(rounding_level(run)))
    hi = float(np.log10(run.norm)) if run.norm > 0.0 else 0.0
    return lo, max(hi, lo + 1.0)


def ticks(lo: float, hi: float, most: int = 6) -> list[int]:
    """At most ``most`` round whole numbers in [lo, hi]."""
    span = max(hi - lo, 1.0)
    for unit in (m * 10**e for e in range(9) for m in (1, 2, 5)):
        first = int(np.ceil(lo / unit)) * unit
        if (hi - first) // unit + 1 <= most or unit >= span:
            return list(range(first, int(np.floor(hi)) + 1, unit))
    return [round(lo)]


# --- where the iteration is ---------------------------------------------------------------------------------------


def finished_rows(run: Run, cursor: int) -> npt.NDArray[np.bool_]:
    """Which rows of H are in final form after step ``cursor``."""
    done = np.zeros(run.n, dtype=bool)
    for event in run.deflations:
        if event.step > cursor:
            break
        if event.kind != "split":
            done[event.row : event.row + event.size] = True
    return done


def healthy_wait(run: Run) -> int:
    """Longest wait for a deflation, in sweeps, that healthy runs of this kind show."""
    from schurbench.diagnosis.figures import healthy_figures

    return healthy_figures(run).longest_wait


def waited_row(run: Run, cursor: int) -> int:
    """The row whose subdiagonal entry the next deflation waits for; 0 when done.

    It is the last of the active window. Two shifts drive out two eigenvalues together, so with them it is whichever of
    the last two rows has the smaller entry.
    """
    lo, hi = run.window(cursor)
    ahead = run.steps[min(cursor, len(run.steps) - 1)] if len(run.steps) else None
    if ahead is not None and len(ahead.shifts) == 2 and hi - lo >= 3:
        last_two = run.subdiagonal(cursor)[hi - 3 : hi - 1]
        return hi - 2 + int(last_two[1] <= last_two[0])
    return max(0, hi - 1)


def longest_wait(run: Run) -> int:
    """The last state in which the longest wait for a deflation still lasted; 0 for a run without steps."""
    if not len(run.waits):
        return 0
    step = int(np.argmax(run.waits)) + 1
    return step - 1 if run.steps[step - 1].deflations else step


def row_name(run: Run, row: int, state: State | None = None) -> str:
    """``row 41 (mostly reach 3 level)``: the physical state that has the largest share in this row of H, if known.

    The rows of H are combinations of the states of the matrix; column ``row`` of Z holds their shares. No state is
    named where Z was not accumulated, where the source has no names, or where no share reaches one half.
    """
    labels = run.matrix.labels
    if state is None or state.Z is None or labels is None or not 0 <= row < run.n:
        return f"row {row}"
    shares = np.abs(state.Z[:, row]) ** 2
    most = int(np.argmax(shares))
    return f"row {row} (mostly {labels[most]})" if shares[most] >= 0.5 else f"row {row}"


def _wait(run: Run, cursor: int) -> int:
    """Sweeps since the last deflation in state ``cursor``; none just after one."""
    return int(run.waits[cursor - 1]) if cursor >= 1 and not run.steps[cursor - 1].deflations else 0


# --- the panels ---------------------------------------------------------------------------------------------------


def matrix_view(run: Run, cursor: int, state: State | None = None) -> MatrixView:
    """H after step ``cursor``; ``state`` saves rebuilding it when the caller has it already."""
    state = run.state(cursor) if state is None else state
    magnitude = np.abs(state.H)
    level = pool(_log10(magnitude), (PICTURE_SIDE, PICTURE_SIDE))
    lo, hi = run.window(cursor)
    n = run.n
    zeros = np.count_nonzero(magnitude == 0.0)
    faint = np.count_nonzero(magnitude < rounding_level(run)) - zeros
    share = 100.0 / max(1, n * n)
    done = int(np.count_nonzero(finished_rows(run, cursor)))
    if hi > lo:
        waiting = n - done - (hi - lo)
        where = f"Active: {rows((lo, hi))} of {n}; finished {done}" + (f", waiting {waiting}." if waiting > 0 else ".")
    else:
        where = f"All {n} rows are finished."
    amounts = f"Zero: {number(share * zeros)}\u00a0%; under rounding level: {number(share * faint)}\u00a0%."
    return MatrixView(level, (lo, hi), looked_into(run, cursor), f"{where} {amounts}")


def looked_into(run: Run, cursor: int) -> tuple[int, int]:
    """Rows of the deflation window that step ``cursor`` looked into; (0, 0) for any other step."""
    step = run.steps[cursor - 1] if cursor >= 1 else None
    if step is None or step.kind != "deflation window":
        return 0, 0
    return step.window[1] - step.rows, step.window[1]


def map_view(run: Run) -> MapView:
    """Subdiagonal magnitudes of every state of the run.

    Where rows have to be pooled, the entries inside finished 2×2 blocks are left out: every other row has one in real
    form, and they would hide that everything around them is zero.
    """
    states = len(run.steps) + 1
    if run.n < 2:
        return MapView(np.full((1, 1), -np.inf))
    table = np.empty((run.n - 1, states))
    for k in range(states):
        table[:, k] = run.subdiagonal(k)
    if run.n - 1 > PICTURE_SIDE:
        for event in run.deflations:
            if event.kind == "pair":
                table[event.row, event.step :] = 0.0
    return MapView(pool(_log10(table), (PICTURE_SIDE, 2 * PICTURE_SIDE)))


def curves_view(run: Run, chosen: tuple[int, ...]) -> CurvesView:
    """Histories of the subdiagonal entries ``chosen`` (rows, 1 … n−1), at most 250 states of the run."""
    last = len(run.steps)
    at = np.unique(np.linspace(0, last, min(last + 1, CURVE_POINTS)).astype(int))
    kept = tuple(dict.fromkeys(r for r in chosen if 1 <= r < run.n))
    values = np.zeros((len(kept), len(at)))
    threshold = np.full(len(at), np.nan)
    for j, k in enumerate(at):
        subdiagonal = run.subdiagonal(int(k))
        values[:, j] = subdiagonal[[r - 1 for r in kept]]
        if kept:
            threshold[j] = deflation_threshold(run, int(k), kept[0])
    level = _log10(values)
    level[np.isneginf(level)] = np.nan
    return CurvesView(at.astype(np.float64), kept, level, _finite(_log10(threshold)))


def deflation_threshold(run: Run, cursor: int, row: int) -> float:
    """Largest |h[row, row−1]| that the run's deflation test would accept after step ``cursor``."""
    from schurbench.kernels import deflation_threshold as threshold

    diagonal, below, above = run.diagonal(cursor), run.subdiagonal(cursor), run.superdiagonal(cursor)
    tol = run.settings.tol
    return float(
        threshold(
            diagonal[row - 1],
            diagonal[row],
            below[row - 1],
            abs(above[row - 1]),
            below[row - 2] if row >= 2 else 0.0,
            below[row] if row + 1 < run.n else 0.0,
            deflation_test(run.settings.deflation).code,
            -1.0 if tol is None else tol,
            run.norm,
        )
    )


def _finite(values: Floats) -> Floats:
    return np.where(np.isfinite(values), values, np.nan)


def subdiagonal_sentence(run: Run, cursor: int, row: int, state: State | None = None) -> str:
    """What the chosen subdiagonal entry is doing at the cursor."""
    if run.n < 2:
        return "A matrix of order 1 has no subdiagonal."
    name = row_name(run, row, state).capitalize()
    if row < 1:
        return f"{name} is the first row and has no entry to its left."
    magnitude = float(run.subdiagonal(cursor)[row - 1])
    lo, hi = run.window(cursor)
    if magnitude == 0.0:
        return f"{name}: the subdiagonal entry is exactly zero; it has deflated."
    threshold = deflation_threshold(run, cursor, row)
    text = f"{name}: |h| = {number(magnitude)}, deflates under {number(threshold)}"
    if lo < row < hi:
        waited = _wait(run, cursor)
        return f"{text}. It has waited {plural(waited, 'sweep')}; healthy is up to {healthy_wait(run)}."
    return f"{text}. It lies outside the active window, {rows((lo, hi))}."


def deflation_view(run: Run) -> DeflationView:
    """Deflations of the whole run and the outline of the active window."""
    kinds: dict[str, list[tuple[float, float]]] = {"single": [], "pair": [], "split": []}
    for event in run.deflations:
        kinds[str(event.kind)].append((event.step, event.row))
    last = len(run.steps)
    at = np.unique(np.linspace(0, last, min(last + 1, 2 * CURVE_POINTS)).astype(int))
    outline = np.array([(k, *run.window(int(k))) for k in at], dtype=np.float64).reshape(-1, 3)
    outline = outline[outline[:, 2] > outline[:, 1]]
    outline[:, 2] -= 1.0
    arrays = [np.array(kinds[kind], dtype=np.float64).reshape(-1, 2) for kind in ("single", "pair", "split")]
    return DeflationView(arrays[0], arrays[1], arrays[2], outline)


def _event(event: Deflation) -> str:
    kind = {"single": "one eigenvalue", "pair": "a pair", "split": "a split"}[str(event.kind)]
    if event.row == 0:
        return f"{kind} at the top of H"
    if event.magnitude == 0.0:
        return f"{kind} at row {event.row}, where the entry was exactly zero"
    return f"{kind} at row {event.row}, {number(event.magnitude)} under the threshold {number(event.threshold)}"


def deflation_sentence(run: Run, cursor: int) -> str:
    """What deflated at the cursor, or how far the neighbouring deflations are."""
    events = run.deflations
    if not events:
        return "Nothing has deflated in this run."
    steps = [event.step for event in events]
    upto = bisect_right(steps, cursor)
    here = [event for event in events[:upto] if event.step == cursor]
    found = sum(event.size for event in events[:upto] if event.kind != "split")
    tally = f"{found} of {run.n} eigenvalues are out"
    if here:
        more = f", and {plural(len(here) - 1, 'more deflation')}" if len(here) > 1 else ""
        return f"Step {cursor}: {_event(here[0])} ({here[0].test} test){more}. {tally}."
    before = f"the last deflation was at step {steps[upto - 1]}" if upto else "nothing has deflated yet"
    after = f"the next comes at step {steps[upto]}" if upto < len(steps) else "none follows"
    return f"Step {cursor}: no deflation; {before}, {after}. {tally}."


def _points(values: npt.NDArray[np.complex128]) -> Floats:
    values = np.asarray(values, dtype=np.complex128).reshape(-1)
    return np.stack([values.real, values.imag], axis=1)


def spectrum_limits(run: Run) -> tuple[tuple[float, float], tuple[float, float]]:
    """Ranges of the real and the imaginary axis that hold the Ritz values the run ended with, the origin included."""
    values = run.to_matrix_units(run.ritz(len(run.steps)))
    values = values[np.isfinite(values)]

    def padded(lo: float, hi: float) -> tuple[float, float]:
        lo, hi = min(lo, 0.0), max(hi, 0.0)
        pad = 0.12 * (hi - lo) or 1.0
        return lo - pad, hi + pad

    if not len(values):
        return (-1.0, 1.0), (-1.0, 1.0)
    x = padded(float(values.real.min()), float(values.real.max()))
    y = padded(float(values.imag.min()), float(values.imag.max()))
    if y[1] - y[0] < 1e-3 * (x[1] - x[0]):
        half = 0.5e-3 * (x[1] - x[0])
        y = (-half, half)
    return x, y


def spectrum_view(run: Run, cursor: int, row: int | None = None) -> SpectrumView:
    """Ritz values after step ``cursor``, converged ones apart, with the shifts of that step."""
    values = np.asarray(run.to_matrix_units(run.ritz(cursor)), dtype=np.complex128)
    done = finished_rows(run, cursor)
    step = run.steps[cursor - 1] if cursor >= 1 else None
    used = (step.shifts or step.handed_on) if step is not None else ()
    shifts = run.to_matrix_units(np.array(used, dtype=np.complex128)) if used else np.empty(0)
    chosen = values[row : row + 1] if row is not None and 0 <= row < run.n else np.empty(0)
    text = f"{int(done.sum())} of {run.n} converged."
    if step is not None and len(shifts):
        kind = "Exceptional shift" if step.exceptional else "Shift" if step.shifts else "Handed-on shift"
        text += f" {kind}{'s' if len(shifts) > 1 else ''} {_shifts_text(shifts)}."
    if done.any():
        rightmost = values[done][int(np.argmax(values[done].real))]
        text += f" Rightmost converged {complex_number(complex(rightmost))}."
    (left, right), (low, high) = spectrum_limits(run)
    inside = (values.real >= left) & (values.real <= right) & (values.imag >= low) & (values.imag <= high)
    if not inside.all():
        text += f" Outside the frame: {int(np.count_nonzero(~inside))}."
    return SpectrumView(_points(values[~done]), _points(values[done]), _points(shifts), _points(chosen), text)


def _shifts_text(shifts: npt.NDArray[np.complex128]) -> str:
    first = complex(shifts[0])
    if len(shifts) > 1 and complex(shifts[1]) == first.conjugate() and first.imag != 0.0:
        named = [complex_number(complex(first.real, abs(first.imag))).replace(" + ", " ± ")]
    else:
        named = [complex_number(complex(shift)) for shift in shifts[:2]]
    if len(shifts) > 2:
        named.append(f"{len(shifts) - 2} more")
    return " and ".join([", ".join(named[:-1]), named[-1]] if len(named) > 1 else named)


def track_view(run: Run, columns: int = 1200) -> TrackView:
    """Sweeps waited since the last deflation, one column a step."""
    waits = np.asarray(run.waits, dtype=np.float64).reshape(1, -1)
    steps = waits.shape[1]
    height = pool(waits, (1, columns))[0] if steps else np.zeros(0)
    edges = (np.arange(len(height) + 1) * steps) / max(1, len(height)) + 0.5
    deflations = np.unique(np.array([event.step for event in run.deflations], dtype=np.float64))
    exceptional = np.array(run.exceptional_steps, dtype=np.float64)
    healthy = float(healthy_wait(run))
    top = max(float(waits.max(initial=0.0)), 1.25 * healthy)
    windows = np.array([step.index for step in run.steps if step.kind == "deflation window"], dtype=np.float64)
    return TrackView(edges, height, deflations, exceptional, windows, healthy, top)


def track_sentence(run: Run, cursor: int) -> str:
    """Where the cursor is and what the iteration waits for there."""
    last = len(run.steps)
    if cursor == 0:
        return f"Start: the Hessenberg form of {run.matrix.name}. {plural(last, 'step')} recorded."
    step = run.steps[cursor - 1]
    if step.kind == "deflation window":
        out = sum(event.size for event in step.deflations if event.test == SPIKE)
        handed = len(step.handed_on)
        return (
            f"Step {cursor} of {last}: looked into a deflation window of {plural(step.rows, 'row')}: "
            f"{plural(out, 'eigenvalue') if out else 'none'} deflated, {handed or 'none'} handed on as shifts."
        )
    kinds = {"single": "single shift", "double": "double shift", "two singles": "two single shifts"}
    kind = "no sweep needed" if step.kind == "scan" else kinds.get(str(step.kind), str(step.kind))
    if step.kind == "many shifts":
        kind = f"{len(step.shifts)} shifts"
    text = f"Step {cursor} of {last}: {kind}, {rows(step.window)}"
    if step.exceptional:
        text += ", exceptional"
    if step.deflations:
        return f"{text}; deflated after {plural(int(run.waits[cursor - 1]), 'sweep')}."
    return f"{text}; row {waited_row(run, cursor)} has waited {plural(_wait(run, cursor), 'sweep')}."
