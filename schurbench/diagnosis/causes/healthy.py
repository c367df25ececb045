"""healthy: the iteration needed no more sweeps, and waited no longer, than healthy ones do."""

from __future__ import annotations

from schurbench.diagnosis.case import Case
from schurbench.diagnosis.finding import Finding, Rank
from schurbench.prepare.plain import number, plural

__all__ = ["Healthy"]


class Healthy:
    """Converged within the measured figures; the local phase doubles the digits a sweep."""

    code = "healthy"

    def finding(self, case: Case) -> Finding | None:
        """Applies to a converged run without trouble."""
        run = case.run
        if not run.converged or case.in_trouble:
            return None
        healthy = case.healthy
        rate = run.sweeps / run.n
        evidence = {
            "sweeps": float(run.sweeps),
            "measured_sweeps_per_eigenvalue": rate,
            "healthy_sweeps_per_eigenvalue_least": healthy.sweeps[0],
            "healthy_sweeps_per_eigenvalue_most": healthy.most_sweeps(run.n) / run.n,
            "measured_longest_wait": float(case.longest_wait),
            "healthy_longest_wait": float(healthy.longest_wait),
            "exceptional_shifts": float(len(run.exceptional_steps)),
        }
        if run.sweeps == 0:
            statement = "Nothing had to be iterated: the matrix was in Schur form after permuting and reducing it."
        else:
            statement = (
                f"The iteration is healthy: {number(rate)} sweeps an eigenvalue ({plural(run.sweeps, 'sweep')} in all) "
                f"and never more than {plural(case.longest_wait, 'sweep')} for a deflation; a {healthy.kind} usually "
                f"takes {healthy.sweeps[0]:.3g} to {healthy.sweeps[1]:.3g}, waits up to {healthy.longest_wait}, and is "
                f"in trouble from {healthy.trouble_wait}."
            )
        return Finding(
            cause=self.code,
            statement=statement,
            evidence=evidence,
            steps=(1, len(run.steps)) if len(run.steps) else (),
            confidence=0.95,
            rank=Rank.HEALTHY,
        )
