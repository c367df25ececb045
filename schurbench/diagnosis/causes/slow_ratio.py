"""slow-ratio: the shifts separate the eigenvalues poorly, so an entry falls along a straight line."""

from __future__ import annotations

import math

from schurbench.diagnosis.case import Case, Decay, Stretch
from schurbench.diagnosis.causes.base import Judgement, all_rows, more_stretches, sweeps_of
from schurbench.diagnosis.finding import Finding, SettingsRemedy
from schurbench.diagnosis.remedies import change
from schurbench.measures import ULP
from schurbench.policy import EXCEPTIONAL_PERIOD
from schurbench.prepare.plain import number

__all__ = ["SlowRatio"]

#: Share of the variation of log|h| that the line has to explain.
_STRAIGHT = 0.9

#: Largest disagreement of the two slopes, as a share of the steeper one.
_DISAGREEMENT = 0.35

#: Share of the rounding level of the norm under which an entry is far below it.
_FAR_BELOW = 1e-4


class SlowRatio:
    """log|h| on a straight line whose slope is that of |p(λᵢ₊₁)/p(λᵢ)|, close to 1."""

    code = "slow-ratio"

    def judge(self, case: Case, stretch: Stretch) -> Judgement | None:
        """Fits when the entry falls on a line of the predicted slope."""
        decay = case.decay(stretch)
        if decay is None or decay.straightness < _STRAIGHT or not 0.0 < decay.measured < 1.0:
            return None
        disagreement = _disagreement(decay)
        level = case.run.settings.tol or ULP * case.run.norm
        to_go = math.log(decay.magnitude / level) / -math.log(decay.measured)
        below = math.floor(-to_go) if case.run.settings.tol is None else 0
        kept = 2 * below >= stretch.length and decay.magnitude < _FAR_BELOW * level
        if disagreement > _DISAGREEMENT or (decay.measured < _steepest(case) and not kept):
            return None
        evidence = {
            "sweeps_without_deflation": float(stretch.length),
            "row": float(decay.row),
            "measured_decay_per_sweep": decay.measured,
            "predicted_decay_per_sweep": decay.predicted,
            "straightness": decay.straightness,
            "magnitude_at_end": float(case.run.to_matrix_units(decay.magnitude)),
        }
        if stretch.end is None and to_go > 0.0:
            evidence["sweeps_still_needed"] = float(math.ceil(to_go))
        if kept:
            evidence["rounding_level_of_norm"] = float(case.run.to_matrix_units(level))
            evidence["sweeps_below_it"] = float(below)
        return Judgement(
            stretch,
            (decay.row, stretch.window[1]),
            confidence=round(decay.straightness * (1.0 - disagreement), 3),
            evidence=evidence,
        )

    def finding(self, case: Case, judgements: tuple[Judgement, ...]) -> Finding:
        """Gives both slopes and proposes shifts that separate better."""
        worst = judgements[0]
        e = worst.evidence
        row = worst.rows[0]
        statement = (
            f"The entry left of row {row} fell along a straight line for {worst.stretch.length} sweeps, by a factor of "
            f"{number(e['measured_decay_per_sweep'])} a sweep, where the shifts and eigenvalues predict "
            f"{number(e['predicted_decay_per_sweep'])}"
        )
        if "sweeps_still_needed" in e:
            statement += f"; at this rate it needs about {number(e['sweeps_still_needed'])} more sweeps"
        if "sweeps_below_it" in e:
            statement += (
                f"; for about {number(e['sweeps_below_it'])} of them it lay below rounding of the norm "
                f"({number(e['rounding_level_of_norm'])}), and the deflation test {case.run.settings.deflation!r} kept "
                "it because the diagonal entries beside it are small"
            )
        return Finding(
            cause=self.code,
            statement=statement + case.carriers(worst.rows) + "." + more_stretches(judgements),
            evidence=e,
            rows=all_rows(judgements),
            steps=sweeps_of(judgements),
            confidence=worst.confidence,
            remedy=_remedy(case, kept="sweeps_below_it" in e),
        )


def _steepest(case: Case) -> float:
    """Decay a sweep that brings an entry from the norm to rounding within a healthy wait: anything steeper is not slow."""
    return float(ULP ** (1.0 / case.healthy.longest_wait))


def _disagreement(decay: Decay) -> float:
    """Difference of the two slopes of log|h| over the steeper one."""
    measured, predicted = math.log(decay.measured), math.log(max(decay.predicted, 1e-300))
    steeper = max(abs(measured), abs(predicted))
    return abs(measured - predicted) / steeper if steeper > 0.0 else 0.0


def _remedy(case: Case, kept: bool = False) -> SettingsRemedy:
    settings = case.run.settings
    adaptive = settings.strategy in ("francis", "wilkinson", "multishift")
    if kept and adaptive and settings.deflation != "norm":
        return change(
            case,
            "Judge entries by the norm of H (deflation test 'norm'); where the small diagonal entries matter, compare the "
            "small eigenvalues of both runs.",
            deflation="norm",
        )
    if not adaptive:
        return change(
            case,
            "Use shifts that follow the eigenvalues, so that convergence turns quadratic (strategy 'auto').",
            strategy="auto",
        )
    if settings.exceptional == 0:
        return change(
            case,
            f"Allow an exceptional shift after {EXCEPTIONAL_PERIOD} sweeps without a deflation.",
            exceptional=EXCEPTIONAL_PERIOD,
        )
    other = "wilkinson" if settings.form == "real" else "francis"
    return change(case, f"Try the other family of shifts (strategy {other!r}).", strategy=other)
