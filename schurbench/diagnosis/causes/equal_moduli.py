"""equal-moduli: the shifts are equally far from every eigenvalue, so no entry has a reason to shrink."""

from __future__ import annotations

import numpy as np

from schurbench.diagnosis.case import Case, Stretch
from schurbench.diagnosis.causes.base import Judgement, all_rows, more_stretches, sweeps_of
from schurbench.diagnosis.finding import Finding, SettingsRemedy
from schurbench.diagnosis.remedies import change
from schurbench.policy import EXCEPTIONAL_PERIOD
from schurbench.prepare.plain import number

__all__ = ["EqualModuli"]

#: Largest spread of |p(λ)| over the window, and largest movement of a shift over ‖H‖, that count as equal. With a
#: spread of 0.2 % an entry needs 18 000 sweeps to fall to rounding level; from there on slow-ratio is the better word.
_SPREAD = 0.002
_SHIFT_MOVEMENT = 0.01

#: Decay a sweep, of the geometric mean of the subdiagonal of the window, that counts as none.
_STILL = 0.998


class EqualModuli:
    """All |p(λ)| equal: orthogonal and cyclic matrices without a shift, spectra on a circle about the shift."""

    code = "equal-moduli"

    def judge(self, case: Case, stretch: Stretch) -> Judgement | None:
        """Fits when |p| is equal over the window while neither shifts nor subdiagonal move."""
        lo, hi = stretch.window
        if hi - lo < 2 or not case.known(stretch):
            return None
        gains = case.gains(stretch)
        with np.errstate(over="ignore"):  # an eigenvalue that is a shift
            spread = float(np.expm1(gains.max() - gains.min()))
        shifts = case.shifts(stretch)
        moved = np.abs(shifts - shifts[-1])
        moved = moved[np.isfinite(moved)]  # sweeps may differ in their number of shifts
        movement = float(moved.max(initial=0.0)) / (case.run.norm or 1.0)
        if spread > _SPREAD or movement > _SHIFT_MOVEMENT:
            return None
        level = np.abs(case.bands(stretch)[:, 1, lo : hi - 1])
        if not level.all():
            return None
        mean = np.log(level).mean(axis=1)
        sweeps = max(1, int(np.ptp(case.sweep_numbers(stretch))))
        measured = float(np.exp((mean[-1] - mean[0]) / sweeps))
        if measured < _STILL:
            return None
        return Judgement(
            stretch,
            stretch.window,
            confidence=round(1.0 - 0.5 * spread / _SPREAD, 3),
            evidence={
                "sweeps_without_deflation": stretch.length,
                "rows_in_window": stretch.rows,
                "measured_decay_per_sweep": measured,
                "predicted_decay_per_sweep": float(np.exp(np.sort(gains)[0] - np.sort(gains)[-1])),
                "spread_of_shift_polynomial": spread,
                "shift_movement_over_norm": movement,
            },
        )

    def finding(self, case: Case, judgements: tuple[Judgement, ...]) -> Finding:
        """Names the window and proposes a shift that breaks the tie."""
        worst = judgements[0]
        evidence = worst.evidence
        lo, hi = worst.stretch.window
        spread = number(evidence["spread_of_shift_polynomial"])
        predicted, measured = (
            number(evidence["predicted_decay_per_sweep"]),
            number(evidence["measured_decay_per_sweep"]),
        )
        statement = (
            f"Rows {lo} to {hi - 1} stood still for {worst.stretch.length} sweeps: the shift polynomial is equally "
            f"large at all {hi - lo} eigenvalues there (to within {spread} of its size), so the predicted decay a "
            f"sweep is {predicted} and the measured one {measured}{case.carriers(worst.rows)}."
        )
        return Finding(
            cause=self.code,
            statement=statement + more_stretches(judgements),
            evidence=evidence,
            rows=all_rows(judgements),
            steps=sweeps_of(judgements),
            confidence=worst.confidence,
            remedy=_remedy(case),
        )


def _remedy(case: Case) -> SettingsRemedy:
    settings = case.run.settings
    if settings.exceptional == 0 and settings.strategy not in ("zero", "given"):
        return change(
            case,
            f"Allow an exceptional shift after {EXCEPTIONAL_PERIOD} sweeps without a deflation: one can break the tie.",
            exceptional=EXCEPTIONAL_PERIOD,
        )
    return change(
        case,
        "Take shifts from the matrix itself, with exceptional ones when nothing moves (strategy 'auto').",
        strategy="auto",
    )
