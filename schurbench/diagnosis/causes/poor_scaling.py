"""poor-scaling: rows and columns of wildly different norm hide small eigenvalues under rounding."""

from __future__ import annotations

import math

import numpy as np

from schurbench.diagnosis.case import Case
from schurbench.diagnosis.finding import Finding, Rank, SettingsRemedy
from schurbench.diagnosis.remedies import change
from schurbench.measures import ULP
from schurbench.prepare.plain import number, ten_to
from schurbench.prepare.profile import BALANCE_REMARK

__all__ = ["PoorScaling", "scaling"]

#: Decades of scale factors beyond which scaling itself may lift rounding noise above small entries.
_WIDE = -math.log10(ULP)


class PoorScaling:
    """Balancing would shrink the norm, and with it the error that rounding makes in every eigenvalue."""

    code = "poor-scaling"

    def finding(self, case: Case) -> Finding | None:
        """Applies to a run without scaling of a matrix whose norm balancing shrinks at least tenfold."""
        run, p = case.run, case.profile
        if run.settings.balance in ("scale", "both") or p.balance_factor < BALANCE_REMARK:
            return None
        sizes = np.abs(case.eigenvalues)
        sizes = sizes[~np.isnan(sizes)]
        noise = run.n * ULP * run.norm
        hidden = int(np.count_nonzero(sizes < noise))
        rescued = int(np.count_nonzero((sizes < noise) & (sizes >= noise / p.balance_factor)))
        statement = (
            f"Rows differ by {ten_to(p.row_norm_decades)} in norm and balancing would shrink the 1-norm "
            f"{number(p.balance_factor)}-fold; rounding at the present norm reaches {number(_units(case, noise))}"
        )
        if hidden:
            statement += f", above {hidden} of the {run.n} eigenvalues"
        wide = p.balance_decades > _WIDE
        if wide:
            statement += (
                f"; the scale factors span {number(p.balance_decades)} decades, more than the digits of a double, so "
                "check that no small coupling drowns"
            )
        return Finding(
            cause=self.code,
            statement=statement + ".",
            evidence={
                "norm_one": p.norm_one,
                "predicted_norm_one_balanced": p.norm_one / p.balance_factor,
                "balance_factor": p.balance_factor,
                "scale_factor_decades": p.balance_decades,
                "row_norm_decades": p.row_norm_decades,
                "rounding_level": _units(case, noise),
                "predicted_rounding_level_balanced": _units(case, noise / p.balance_factor),
                "eigenvalues_below_rounding": hidden,
                "of_those_above_it_when_balanced": rescued,
            },
            confidence=round(min(0.99, 0.6 + 0.1 * math.log10(p.balance_factor)) * (0.7 if wide else 1.0), 3),
            remedy=scaling(case),
            rank=Rank.EIGENVALUES,
        )


def scaling(case: Case) -> SettingsRemedy:
    """The remedy of everything that comes from poor scaling."""
    choice = "both" if case.run.settings.balance == "permute" else case.profile.balance_choice
    return change(
        case, "Scale rows and columns before the reduction, which scipy.linalg.schur never does.", balance=choice
    )


def _units(case: Case, value: float) -> float:
    return float(case.run.to_matrix_units(value))
