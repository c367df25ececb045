"""reducible: a permutation splits the matrix into blocks, and the run did not look for it."""

from __future__ import annotations

from schurbench.diagnosis.case import Case
from schurbench.diagnosis.finding import Finding, Rank
from schurbench.diagnosis.remedies import change
from schurbench.prepare.plain import plural

__all__ = ["Reducible"]


class Reducible:
    """Isolated eigenvalues that permuting would have taken out before any sweep."""

    code = "reducible"

    def finding(self, case: Case) -> Finding | None:
        """Applies when the run did not permute although permuting isolates eigenvalues."""
        run, p = case.run, case.profile
        isolated = p.n - (p.isolated[1] - p.isolated[0])
        if run.settings.balance in ("permute", "both") or isolated == 0 or p.n < 3 or p.triangular != "no":
            return None
        choice = "both" if run.settings.balance == "scale" else "permute"
        return Finding(
            cause=self.code,
            statement=(
                f"A permutation of the states would take {plural(isolated, 'eigenvalue')} of {p.n} out before any "
                f"sweep; the non-zero pattern falls into {plural(p.components, 'block')}, the largest of order "
                f"{p.component_sizes[0]}, and this run did not permute."
            ),
            evidence={
                "isolated_eigenvalues": isolated,
                "blocks": p.components,
                "largest_block": p.component_sizes[0],
                "order": p.n,
            },
            confidence=0.95,
            remedy=change(case, "Permute first, which costs next to nothing.", balance=choice),
            rank=Rank.ADVICE,
        )
