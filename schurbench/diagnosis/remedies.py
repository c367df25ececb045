"""Making remedies for a run, and trying them."""

from __future__ import annotations

import dataclasses
from typing import TYPE_CHECKING, Any

import numpy as np

from schurbench.diagnosis.finding import Finding, RemedyResult, SettingsRemedy, SolverRemedy, ratio_text
from schurbench.measures import residual_ratio
from schurbench.policy import EXCEPTIONAL_PERIOD, STRATEGIES, strategy_for
from schurbench.prepare.plain import number, plural

if TYPE_CHECKING:
    from schurbench.diagnosis.case import Case
    from schurbench.journal import Run

__all__ = ["change", "final_backward_error", "try_remedy"]

#: Share of the sweeps a remedy has to save before it counts as help for the iteration.
_SAVED = 0.8

#: Largest relative movement of an eigenvalue that two sound runs may still show, in units of n·ulp.
_MOVEMENT = 1e3

_STRATEGY_DEFAULTS = {"balance": "permute", "flip": False, "deflation": "ahues-tisseur", "tol": None}


def change(case: Case, text: str, **changes: Any) -> SettingsRemedy:
    """A remedy that keeps the settings of the run except for ``changes``.

    A strategy of the user's own cannot be named by its settings, so a remedy that does not name another one falls back
    on ``auto``. The limit of the run is not kept: a remedy deserves the default one.
    """
    before = case.run.settings
    keywords: dict[str, Any] = {}
    if before.strategy in STRATEGIES:
        keywords["strategy"] = before.strategy
        automatic = strategy_for("auto", n=case.run.n, real=before.form == "real")
        if before.strategy == "given":
            keywords["shifts"] = [complex(*pair) if pair[1] else pair[0] for pair in before.options["shifts"]]
        pure = before.strategy in ("zero", "given")
        if before.exceptional != (0 if pure else EXCEPTIONAL_PERIOD):
            keywords["exceptional"] = before.exceptional
        if before.strategy == getattr(automatic, "name", "") and "strategy" not in changes:
            keywords["strategy"] = "auto"
    if case.run.matrix.is_real and before.form == "complex":
        keywords["form"] = "complex"
    for name, usual in _STRATEGY_DEFAULTS.items():
        if getattr(before, name) != usual:
            keywords[name] = getattr(before, name)
    if "strategy" in changes:
        for name in ("shifts", "exceptional", "form"):
            keywords.pop(name, None)
    keywords.update(changes)
    # "auto" is what iterate does anyway: leave it out unless the strategy is the point of the remedy.
    if keywords.get("strategy") == "auto" and "strategy" not in changes:
        del keywords["strategy"]
    return SettingsRemedy(text=text, settings=keywords, changes=tuple(changes), matrix=case.run.matrix)


def final_backward_error(run: Run) -> float | None:
    """‖D⁻¹AD − ZHZᴴ‖₁ / (n·ulp·‖D⁻¹AD‖₁) at the end of a run; None where Z was not accumulated."""
    state = run.state(len(run.steps))
    if state.Z is None:
        return None
    half = state.exponent // 2
    a = run.matrix.array * 2.0**half * 2.0 ** (state.exponent - half)
    scaled: Any = np.ascontiguousarray(a / state.D[:, None] * state.D[None, :])
    return residual_ratio(scaled, state.Z, state.H)


def try_remedy(case: Case, finding: Finding) -> Finding:
    """The finding with its remedy carried out and judged."""
    remedy = finding.remedy
    if isinstance(remedy, SettingsRemedy):
        result = _judge_run(case, finding, remedy)
        return dataclasses.replace(finding, remedy=dataclasses.replace(remedy, result=result))
    if isinstance(remedy, SolverRemedy):
        return dataclasses.replace(finding, remedy=dataclasses.replace(remedy, result=_judge_solver(case, remedy)))
    return finding


def _judge_run(case: Case, finding: Finding, remedy: SettingsRemedy) -> RemedyResult:
    before, after = case.run, remedy.run()
    about_values = finding.cause == "poor-scaling"
    sweeps = f"{plural(before.sweeps, 'sweep')} before, {after.sweeps} after"
    ended = "" if after.converged else f", still not converged ({after.stop.message})"
    if about_values and before.converged and after.converged:
        moved = _largest_movement(before, after)
        helped = moved > _MOVEMENT * before.n * 2.0**-52
        verdict = (
            f"an eigenvalue moved by {number(moved)} of its size, and the scaled run has the smaller error bound"
            if helped
            else f"no eigenvalue moved by more than {number(moved)} of its size, so nothing was gained"
        )
        text = f"{verdict} ({sweeps})"
    else:
        helped = after.converged and (not before.converged or after.sweeps <= _SAVED * before.sweeps)
        text = f"{'it helped' if helped else 'it did not help'}: {sweeps}{ended}"
    error_before, error_after = final_backward_error(before), final_backward_error(after)
    text += f"; backward error {ratio_text(error_before)} and {ratio_text(error_after)} n·ulp"
    return RemedyResult(
        helped=helped,
        statement=text[0].upper() + text[1:] + ".",
        sweeps_before=before.sweeps,
        sweeps_after=after.sweeps,
        seconds_before=before.seconds,
        seconds_after=after.seconds,
        backward_error_before=error_before,
        backward_error_after=error_after,
        converged_before=before.converged,
        converged_after=after.converged,
    )


def _judge_solver(case: Case, remedy: SolverRemedy) -> RemedyResult:
    from schurbench.measures import RATIO_LIMIT

    run, solution = case.run, remedy.run()
    error = final_backward_error(run)
    helped = solution.backward_error < RATIO_LIMIT
    verdict = "the structured solver did it" if helped else "the structured solver is not accurate enough here"
    text = (
        f"{verdict} in {number(solution.seconds)} s against {number(run.seconds)} s, "
        f"backward error {number(solution.backward_error)} against {ratio_text(error)} n·ulp"
    )
    return RemedyResult(
        helped=helped,
        statement=text[0].upper() + text[1:] + ".",
        sweeps_before=run.sweeps,
        sweeps_after=0,
        seconds_before=run.seconds,
        seconds_after=solution.seconds,
        backward_error_before=error,
        backward_error_after=solution.backward_error,
        converged_before=run.converged,
        converged_after=helped,
    )


def _largest_movement(before: Run, after: Run) -> float:
    """Largest relative difference between the eigenvalues of two converged runs of one matrix, best paired."""
    from schurbench.matching import pair_spectra

    # Both in working units, which only depend on the matrix: those of the matrix might overflow.
    first, second = before.ritz(len(before.steps)), after.ritz(len(after.steps))
    order, distance = pair_spectra(first, second)
    size = np.maximum(np.abs(second[order]), np.abs(first))
    return float((distance[size > 0.0] / size[size > 0.0]).max(initial=0.0))
