"""stopped-early: the run ended before the iteration was in any trouble."""

from __future__ import annotations

from schurbench.diagnosis.case import Case
from schurbench.diagnosis.finding import Finding
from schurbench.diagnosis.remedies import change
from schurbench.prepare.plain import plural

__all__ = ["StoppedEarly"]


class StoppedEarly:
    """A limit or a cancel came first; the sweeps so far were healthy."""

    code = "stopped-early"

    def finding(self, case: Case) -> Finding | None:
        """Applies to a run without convergence and without trouble."""
        run = case.run
        if run.converged or case.in_trouble:
            return None
        lo, hi = run.stop.window
        return Finding(
            cause=self.code,
            statement=(
                f"The run was ended ({run.stop.reason}) after {plural(run.sweeps, 'sweep')} with {case.deflated} of "
                f"{run.n} eigenvalues out; up to there it waited at most {plural(case.longest_wait, 'sweep')} for a "
                f"deflation, where healthy ones wait up to {case.healthy.longest_wait}."
            ),
            evidence={
                "sweeps": run.sweeps,
                "limit": run.settings.limit,
                "eigenvalues_out": case.deflated,
                "measured_longest_wait": case.longest_wait,
                "healthy_longest_wait": case.healthy.longest_wait,
            },
            rows=tuple(range(lo, hi)),
            steps=(len(run.steps),) if len(run.steps) else (),
            confidence=0.9,
            remedy=change(case, "Let it run on with the default limit of sweeps."),
        )
