"""non-normal: eigenvalues are ill-conditioned although the iteration is sound. Do not blame convergence."""

from __future__ import annotations

import numpy as np

from schurbench.diagnosis.case import ILL_CONDITIONED, Case
from schurbench.diagnosis.finding import Finding, Rank
from schurbench.prepare.plain import number, plural
from schurbench.prepare.profile import BALANCE_REMARK

__all__ = ["NonNormal"]

#: Relative movement by rounding from which an eigenvalue counts as ill-determined: half of the digits.
_LOST = 1e-8


class NonNormal:
    """Large condition numbers of eigenvalues that are neither clustered nor spoilt by scaling."""

    code = "non-normal"

    def finding(self, case: Case) -> Finding | None:
        """Applies when rounding moves eigenvalues by more than half of their digits for lack of normality alone."""
        run, p = case.run, case.profile
        unscaled = run.settings.balance not in ("scale", "both") and p.balance_factor >= BALANCE_REMARK
        if case.conditions is None or case.movements is None or unscaled:
            return None
        clustered = {row for cluster in case.clusters for row in cluster.rows}
        size = np.abs(case.eigenvalues)
        ill = (case.conditions >= ILL_CONDITIONED) & (case.movements > _LOST * size)
        rows = tuple(int(row) for row in np.flatnonzero(ill) if int(row) not in clustered)
        if not rows:
            return None
        worst = max(rows, key=lambda row: float(case.movements[row]) if case.movements is not None else 0.0)
        value = case.eigenvalues[worst]
        moved = float(run.to_matrix_units(case.movements[worst]))
        text = f"{number(float(run.to_matrix_units(value.real)))}"
        if value.imag != 0.0:
            imaginary = float(run.to_matrix_units(value.imag))
            text += f" {'+' if imaginary > 0 else '−'} {number(abs(imaginary))}i"
        by = f"about {number(moved)}" if case.movements[worst] < abs(value) else "more than its size"
        return Finding(
            cause=self.code,
            statement=(
                f"{plural(len(rows), 'eigenvalue')} of {run.n} {'is' if len(rows) == 1 else 'are'} ill-conditioned: "
                f"rounding may move {text} by {by} (condition number {number(float(case.conditions[worst]))}). The "
                "matrix is far from normal; this is a property of the matrix, not of the iteration."
            ),
            evidence={
                "eigenvalues_concerned": float(len(rows)),
                "largest_condition_number": float(case.conditions[list(rows)].max()),
                "predicted_movement_by_rounding": moved,
                "departure_from_normality_at_least": p.departure_lower,
            },
            rows=rows,
            confidence=0.9,
            rank=Rank.EIGENVALUES,
        )
