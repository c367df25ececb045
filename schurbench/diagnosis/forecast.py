"""How many sweeps a run used against healthy ones, or how many an unfinished one still needs."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from schurbench.journal import DeflationKind
from schurbench.prepare.plain import number, plain, plural

if TYPE_CHECKING:
    from schurbench.diagnosis.case import Case

__all__ = ["Forecast", "forecast"]

#: Eigenvalues that have to be out before their rate says anything about the rest.
_EVIDENCE = 3


@dataclass(frozen=True, slots=True)
class Forecast:
    """Sweeps used or still needed.

    Attributes
    ----------
    finished : bool
    sweeps : int
        Used so far.
    healthy_sweeps : (float, float)
        What a healthy run on this order takes in all.
    sweeps_left : float
        0 for a finished run.
    sweeps_left_range : (float, float)
        About two standard deviations either way.
    seconds_left : float
        Estimated from the time of the last sweeps, which work on the windows that are left.
    statement : str
    """

    finished: bool
    sweeps: int
    healthy_sweeps: tuple[float, float]
    sweeps_left: float
    sweeps_left_range: tuple[float, float]
    seconds_left: float
    statement: str

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready dictionary."""
        return {name: plain(getattr(self, name)) for name in self.__slots__}


def forecast(case: Case) -> Forecast | None:
    """Forecast from the observed rate of deflation; None where the record gives no ground for one.

    Notes
    -----
    The sweeps between two events that took out one or two eigenvalues are treated as independent draws. With m events
    of mean μ and deviation s behind and R expected ahead, the estimate is μR with a variance of s²R (the draws to
    come) plus (s²/m)R² (the mean itself is only estimated). A stretch that stands out as trouble at the end ends the
    independence, and then nothing is forecast.
    """
    run, healthy = case.run, case.healthy
    whole = (healthy.sweeps[0] * run.n, healthy.sweeps[1] * run.n)
    if run.converged:
        usual = f"{math.floor(whole[0])} to {math.ceil(whole[1])}"
        text = f"Finished after {plural(run.sweeps, 'sweep')}; {usual} are usual for a {healthy.kind} at this order."
        if run.sweeps == 0:
            text = "Finished without a sweep."
        return Forecast(True, run.sweeps, whole, 0.0, (0.0, 0.0), 0.0, text)
    waits: list[int] = []
    sizes: list[int] = []
    waited = 0
    for step in run.steps:
        waited += bool(step.shifts)
        out = sum(d.size for d in step.deflations if d.kind is not DeflationKind.SPLIT and not d.before_sweep)
        if out:
            waits.append(waited)
            sizes.append(out)
            waited = 0
    if len(waits) <= _EVIDENCE or waited >= case.healthy.trouble_wait:
        return None
    # The first one takes longer, because its shifts start from nothing: it says little about the rest.
    waits, sizes = waits[1:], sizes[1:]
    ahead = (run.n - case.deflated) / float(np.mean(sizes))
    mean = float(np.mean(waits))
    spread = float(np.std(waits, ddof=1))
    deviation = spread * math.sqrt(ahead + ahead * ahead / len(waits))
    left = max(mean * ahead - waited, 1.0)
    low, high = max(left - 2.0 * deviation, 1.0), left + 2.0 * deviation
    # A sweep on a window that ends at row hi costs about hi·n operations; later windows end higher up.
    recent = [step.seconds for step in run.steps[-20:] if step.shifts]
    seconds = 0.5 * left * float(np.median(recent)) if recent else 0.0
    text = (
        f"About {number(left)} more sweeps ({number(low)} to {number(high)}) and {number(seconds)} s at the rate so "
        f"far: {number(mean)} sweeps for each of {len(waits)} deflations."
    )
    return Forecast(False, run.sweeps, whole, left, (low, high), seconds, text)
