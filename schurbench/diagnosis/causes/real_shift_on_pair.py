"""real-shift-on-pair: a real shift is equally far from a complex eigenvalue and from its conjugate."""

from __future__ import annotations

import numpy as np

from schurbench.diagnosis.case import Case, Stretch
from schurbench.diagnosis.causes.base import Judgement, all_rows, more_stretches, sweeps_of
from schurbench.diagnosis.finding import Finding
from schurbench.diagnosis.remedies import change
from schurbench.prepare.plain import number

__all__ = ["RealShiftOnPair"]

#: Share of the sweeps in which the trailing 2×2 block has to hold a complex pair.
_SHARE = 0.5


class RealShiftOnPair:
    """|λ − σ| = |λ̄ − σ| for every real σ: the shift follows the diagonal and closes in on neither of the two."""

    code = "real-shift-on-pair"

    def judge(self, case: Case, stretch: Stretch) -> Judgement | None:
        """Fits when real single shifts follow the matrix while its trailing 2×2 block keeps a complex pair."""
        run = case.run
        if not case.real_entries or run.settings.strategy in ("zero", "given") or stretch.rows < 2:
            return None
        shifts = case.shifts(stretch)
        if shifts.shape[1] != 1 or np.any(shifts.imag != 0.0):
            return None
        hi = stretch.window[1]
        diagonal, sub, sup = np.moveaxis(case.bands(stretch)[:, :, :hi].real, 1, 0)
        half = (diagonal[:, hi - 2] - diagonal[:, hi - 1]) / 2
        disc = half * half + sub[:, hi - 2] * sup[:, hi - 2]
        share = float(np.mean(disc < 0.0))
        inside = np.abs(sub[:, hi - 2])
        if share < _SHARE or not inside.all():
            return None
        centre = (diagonal[-1, hi - 2] + diagonal[-1, hi - 1]) / 2
        pair = complex(centre, float(np.sqrt(max(-disc[-1], 0.0))))
        sweeps = max(1, int(np.ptp(case.sweep_numbers(stretch))))
        to_pair, to_conjugate = abs(pair - shifts[-1, 0]), abs(pair.conjugate() - shifts[-1, 0])
        evidence = {
            "sweeps_without_deflation": float(stretch.length),
            "share_of_sweeps_with_complex_pair": share,
            "real_part_of_pair": float(run.to_matrix_units(pair.real)),
            "imaginary_part_of_pair": float(run.to_matrix_units(pair.imag)),
            "last_shift": float(run.to_matrix_units(shifts[-1, 0].real)),
            "distance_to_pair": float(run.to_matrix_units(to_pair)),
            "distance_to_conjugate": float(run.to_matrix_units(to_conjugate)),
            # of the entry between the two rows, over the whole stretch
            "measured_decay_per_sweep": float(np.exp(np.log(inside[-1] / inside[0]) / sweeps)),
            "predicted_decay_per_sweep": float(to_pair / to_conjugate) if to_conjugate > 0.0 else 1.0,
        }
        return Judgement(stretch, (hi - 2, hi), confidence=round(0.5 + 0.5 * share, 3), evidence=evidence)

    def finding(self, case: Case, judgements: tuple[Judgement, ...]) -> Finding:
        """Names the pair and proposes a double shift."""
        worst = judgements[0]
        e = worst.evidence
        hi = worst.rows[1]
        statement = (
            f"For {worst.stretch.length} sweeps rows {hi - 2} and {hi - 1} kept a complex pair "
            f"({number(100 * e['share_of_sweeps_with_complex_pair'])} % of the sweeps; at the end "
            f"{number(e['real_part_of_pair'])} ± {number(e['imaginary_part_of_pair'])}i) while every shift was real: "
            f"the last one, {number(e['last_shift'])}, is {number(e['distance_to_pair'])} from both members, so the "
            f"entry between them shrinks by a factor of {number(e['predicted_decay_per_sweep'])} a sweep (measured "
            f"{number(e['measured_decay_per_sweep'])}){case.carriers(worst.rows)}."
        )
        return Finding(
            cause=self.code,
            statement=statement + more_stretches(judgements),
            evidence=e,
            rows=all_rows(judgements),
            steps=sweeps_of(judgements),
            confidence=worst.confidence,
            remedy=change(
                case,
                "Use both eigenvalues of the trailing block as a double shift, which stays real (strategy 'francis').",
                strategy="francis",
            ),
        )
