"""poor-scaling, seen in the iteration: a window whose norm dwarfs its eigenvalues, on a matrix that balancing would shrink."""

from __future__ import annotations

import numpy as np

from schurbench.diagnosis.case import Case, Stretch
from schurbench.diagnosis.causes.base import Judgement, all_rows, more_stretches, sweeps_of
from schurbench.diagnosis.causes.poor_scaling import scaling
from schurbench.diagnosis.finding import Finding
from schurbench.measures import frobenius
from schurbench.prepare.plain import number
from schurbench.prepare.profile import BALANCE_REMARK

__all__ = ["ScaledWindow"]

#: Norm of the window over its largest eigenvalue that counts as dwarfing. On a regulator loop whose states differ by 10¹¹
#: in size (tests: a chain of such) slow windows showed 690 to 65,000; a normal window has sqrt(rows) at most.
_DWARFS = 100.0


class ScaledWindow:
    """Entries above the diagonal so large that shifts from the corner say little about the eigenvalues."""

    code = "poor-scaling"

    def judge(self, case: Case, stretch: Stretch) -> Judgement | None:
        """Fits when balancing was left out, would help, and the window's norm dwarfs its eigenvalues."""
        if stretch.length <= case.healthy.longest_wait:
            return None  # as long as in a healthy run, so that there is nothing to put down to the scaling
        lo, hi = stretch.window
        factor = case.profile.balance_factor
        if case.run.settings.balance in ("scale", "both") or factor < BALANCE_REMARK or not case.known(stretch):
            return None
        # sweeps on the window change neither its norm nor its eigenvalues, so the finished matrix shows both
        norm = frobenius(case.final[lo:hi, lo:hi])
        largest = float(np.abs(case.eigenvalues[lo:hi]).max())
        if norm < _DWARFS * largest:
            return None
        return Judgement(
            stretch,
            stretch.window,
            confidence=0.8,
            evidence={
                "sweeps_without_deflation": float(stretch.length),
                "window_norm_over_largest_eigenvalue": norm / largest if largest > 0.0 else float("inf"),
                "balance_factor": factor,
                "norm_one": case.profile.norm_one,
                "predicted_norm_one_balanced": case.profile.norm_one / factor,
            },
        )

    def finding(self, case: Case, judgements: tuple[Judgement, ...]) -> Finding:
        """Names the window and proposes to scale."""
        worst = judgements[0]
        lo, hi = worst.stretch.window
        ratio = number(worst.evidence["window_norm_over_largest_eigenvalue"])
        statement = (
            f"Rows {lo} to {hi - 1} waited {worst.stretch.length} sweeps: their norm is {ratio} times their largest "
            f"eigenvalue, because rows and columns of the matrix differ so much in size, and shifts from the corner of such "
            f"a block say little; balancing would shrink the 1-norm of the matrix "
            f"{number(worst.evidence['balance_factor'])}-fold{case.carriers(worst.rows)}."
        )
        return Finding(
            cause=self.code,
            statement=statement + more_stretches(judgements),
            evidence=worst.evidence,
            rows=all_rows(judgements),
            steps=sweeps_of(judgements),
            confidence=worst.confidence,
            remedy=scaling(case),
        )
