"""What the journal holds: frozen records whose arrays are write-protected copies."""

from __future__ import annotations

from dataclasses import asdict, dataclass, field
from enum import StrEnum
from typing import Any

import numpy as np
import numpy.typing as npt

from schurbench.measures import Array

__all__ = [
    "SPIKE",
    "Deflation",
    "DeflationKind",
    "Progress",
    "Rotation",
    "Settings",
    "State",
    "Step",
    "StepKind",
    "Stop",
    "StopReason",
    "Window",
]

#: Half-open range of rows ``(lo, hi)``; always explicit, never "from lo to hi inclusive".
Window = tuple[int, int]


#: Name of the test that a deflation window applies.
SPIKE = "spike"


class StepKind(StrEnum):
    """What one step did to the active window."""

    SINGLE = "single"  #: explicit single-shift step: QR by rotations from the left, the same from the right
    DOUBLE = "double"  #: implicit double-shift sweep in real arithmetic
    TWIN_SINGLE = "two singles"  #: two explicit single-shift steps in complex arithmetic
    MANY = "many shifts"  #: several bulges, or single-shift steps, one after the other
    WINDOW = "deflation window"  #: a deflation window was looked into (aggressive early deflation); no sweep
    SCAN = "scan"  #: no sweep: everything left was negligible or solved directly


class DeflationKind(StrEnum):
    """What a negligible subdiagonal entry led to."""

    SINGLE = "single"  #: one eigenvalue left the window
    PAIR = "pair"  #: a 2×2 block left the window and was standardised
    SPLIT = "split"  #: the window fell into two; no eigenvalue yet


class StopReason(StrEnum):
    """Why a run ended."""

    CONVERGED = "converged"
    LIMIT = "limit"
    STALLED = "stalled"
    CANCELLED = "cancelled"


@dataclass(frozen=True, slots=True)
class Deflation:
    """One subdiagonal entry set to zero, or one block at the top of the matrix found finished.

    Attributes
    ----------
    step : int
        Index of the step during which it happened (1 for the first).
    row : int
        Row of the entry h[row, row−1] (in H), which is the first row of what was split off.
    size : int
        Rows split off: 1, 2, or for a split the rows below the entry in the window.
    kind : DeflationKind
    test : str
        Deflation test that judged the entry; ``"spike"`` in a deflation window, where the magnitude is that of the spike.
    magnitude : float
        |h[row, row−1]| before it was set to zero, in the working units of H; 0 where it was zero or row = 0.
    threshold : float
        Largest magnitude that the test would have accepted there, in the same units.
    eigenvalues : tuple of complex
        Eigenvalues (of H, in its working units) that left the window; empty for a split.
    before_sweep : bool
        True for entries found negligible before the sweep of this step (only in the first step).
    """

    step: int
    row: int
    size: int
    kind: DeflationKind
    test: str
    magnitude: float
    threshold: float
    eigenvalues: tuple[complex, ...]
    before_sweep: bool = False


@dataclass(frozen=True, slots=True)
class Step:
    """One call of `Iteration.step`: at most one sweep or one deflation window, then a scan for negligible entries.

    Attributes
    ----------
    index : int
        1 for the first step; step k leads from state k−1 to state k.
    window : (int, int)
        Half-open range of rows the sweep worked on.
    kind : StepKind
    shifts : tuple of complex
        In the working units of H; empty for a scan.
    exceptional : bool
        Whether the shifts were exceptional ones.
    rotations : int
        Plane rotations, or for a double-shift sweep Householder reflectors, applied from the left.
    seconds : float
        Wall time of the step.
    deflations : tuple of Deflation
    rows : int
        Rows of the deflation window that was looked into, 0 for other kinds of step.
    spikes : tuple of float
        Magnitudes beside the window's Schur form before anything was deflated, top to bottom.
    handed_on : tuple of complex
        Eigenvalues the window left as shifts for the next sweep, most promising first.
    """

    index: int
    window: Window
    kind: StepKind
    shifts: tuple[complex, ...]
    exceptional: bool
    rotations: int
    seconds: float
    deflations: tuple[Deflation, ...] = ()
    rows: int = 0
    spikes: tuple[float, ...] = ()
    handed_on: tuple[complex, ...] = ()


@dataclass(frozen=True, slots=True, eq=False)
class State:
    """H and Z after a step, with 2^exponent · D⁻¹ A D = Z H Zᴴ.

    Attributes
    ----------
    H : (n, n) ndarray, write-protected
    Z : (n, n) ndarray, write-protected, or None when the run did not accumulate it
    window : (int, int)
        Active window; ``(0, 0)`` when done.
    D : (n,) ndarray of float64
        Diagonal scaling, all ones when none was asked for.
    exponent : int
        Power-of-two exponent of the working units; 0 unless the matrix was extremely large or small.
    """

    H: Array
    Z: Array | None
    window: Window
    D: npt.NDArray[np.float64]
    exponent: int


@dataclass(frozen=True, slots=True, eq=False)
class Rotation:
    """One plane rotation or reflector of a step, as an explicit small matrix.

    Attributes
    ----------
    row : int
        First row it acts on.
    side : str
        ``"left"``, ``"right"`` or ``"both"`` (a reflector of an implicit sweep acts from both sides at once).
    matrix : (2, 2) or (3, 3) ndarray
        G such that rows ``row … row+len(G)−1`` become G times themselves; from the right, Gᴴ acts on columns.
    H : (n, n) ndarray, write-protected
        The whole matrix after it was applied. Between left and right rotations of an explicit step the active
        window holds R, or RQ in part, of H − σI.
    """

    row: int
    side: str
    matrix: Array
    H: Array


@dataclass(frozen=True, slots=True)
class Stop:
    """Why and where a run ended."""

    reason: StopReason
    message: str
    window: Window


@dataclass(frozen=True, slots=True)
class Settings:
    """Everything that decides what a run does, as carried out (``auto`` already resolved).

    Attributes
    ----------
    strategy : str
        Name of the shift strategy, or the name a user's own object gives itself.
    form : str
        ``"real"`` or ``"complex"``.
    balance : str
        ``"none"``, ``"permute"``, ``"scale"`` or ``"both"``.
    flip : bool
        Rows and columns reversed before the reduction.
    deflation : str
        ``"neighbour"``, ``"ahues-tisseur"`` or ``"norm"``.
    tol : float or None
        Absolute level, in the working units of H, that replaces rounding level in the deflation test.
    exceptional : int
        Sweeps without a deflation after which an exceptional shift is taken; 0 for never.
    accumulate : bool
        Whether Z is formed.
    limit : int
        Largest number of sweeps.
    stop_when_stalled : bool
    keep : int
        Bytes allowed for checkpoints.
    options : dict
        Further facts about the strategy (the shifts of ``given``, for example), JSON-ready.
    """

    strategy: str
    form: str
    balance: str
    flip: bool
    deflation: str
    tol: float | None
    exceptional: int
    accumulate: bool
    limit: int
    stop_when_stalled: bool
    keep: int
    options: dict[str, Any] = field(default_factory=dict)

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready dictionary."""
        return asdict(self)


@dataclass(frozen=True, slots=True)
class Progress:
    """What a progress callback receives.

    Attributes
    ----------
    phase : str
        ``"reduce"``, ``"iterate"`` or ``"done"``.
    sweeps : int
    window : (int, int)
    deflated : int
        Rows of H already in final form.
    share : float
        Estimated share of the work done, 0 to 1.
    seconds : float
        Wall time since the start of the run.
    forecast : float or None
        Estimated seconds left, None before there is evidence.
    """

    phase: str
    sweeps: int
    window: Window
    deflated: int
    share: float
    seconds: float
    forecast: float | None
