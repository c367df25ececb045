"""unexplained: the iteration was slow, and no known cause fits the record. Silence would be worse than saying so."""

from __future__ import annotations

from schurbench.diagnosis.case import Case
from schurbench.diagnosis.finding import Finding
from schurbench.diagnosis.remedies import change
from schurbench.policy import strategy_for
from schurbench.prepare.plain import number, plural

__all__ = ["unexplained"]


def unexplained(case: Case, confidence: float = 0.3) -> Finding:
    """What was slow, in numbers, and the strategy to try in its place."""
    run, healthy = case.run, case.healthy
    rate = run.sweeps / case.deflated if case.deflated else float("inf")
    rate_text = (
        f"{number(rate)} sweeps an eigenvalue" if case.deflated else f"{run.sweeps} sweeps without an eigenvalue"
    )
    stretches = case.troubled
    real = run.settings.form == "real"
    automatic = strategy_for("auto", n=run.n, real=real)
    other = "auto" if run.settings.strategy != getattr(automatic, "name", "") else "wilkinson" if real else "francis"
    return Finding(
        cause="unexplained",
        statement=(
            f"The iteration took {rate_text} and waited up to {plural(case.longest_wait, 'sweep')} for a deflation, "
            f"where a healthy {healthy.kind} takes {healthy.sweeps[0]:.3g} to {healthy.sweeps[1]:.3g} and waits up to "
            f"{healthy.longest_wait}; none of the known causes fits the record."
        ),
        evidence={
            "measured_sweeps_per_eigenvalue": rate,
            "healthy_sweeps_per_eigenvalue": healthy.sweeps[1],
            "measured_longest_wait": case.longest_wait,
            "healthy_longest_wait": healthy.longest_wait,
        },
        rows=tuple(range(*stretches[0].window)) if stretches else (),
        steps=(stretches[0].first, stretches[0].last) if stretches else (),
        confidence=confidence,
        remedy=change(case, f"Try other shifts (strategy {other!r}).", strategy=other),
    )
