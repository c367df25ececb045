"""From a run to its ranked findings."""

from __future__ import annotations

import time
from typing import TYPE_CHECKING

from schurbench.diagnosis.case import Case, Stretch
from schurbench.diagnosis.causes import RUN_CAUSES, STRETCH_CAUSES, Judgement, unexplained
from schurbench.diagnosis.finding import Diagnosis, Finding
from schurbench.diagnosis.forecast import forecast
from schurbench.diagnosis.remedies import try_remedy

if TYPE_CHECKING:
    from schurbench.journal import Run

__all__ = ["diagnose"]


def diagnose(run: Run, try_remedies: bool = False) -> Diagnosis:
    """Say why a run was slow or failed, or that it was healthy, with evidence from its record.

    Parameters
    ----------
    run : Run
    try_remedies : bool
        Also carry every remedy out and say whether it helped; costs one run each. Remedies that did not help move
        down among the findings of the same rank.

    Returns
    -------
    Diagnosis
        Findings ranked: a cause of slow or failed iteration, then ill-determined eigenvalues, then advice on structure
        or settings, then healthy.
    """
    began = time.perf_counter()
    case = Case(run)
    findings = _iteration_findings(case)
    for cause in RUN_CAUSES:
        finding = cause.finding(case)
        if finding is not None and finding.cause not in [known.cause for known in findings]:
            findings.append(finding)
    if try_remedies:
        findings = [try_remedy(case, finding) for finding in findings]
    findings.sort(key=_order)
    return Diagnosis(tuple(findings), forecast(case), time.perf_counter() - began)


def _iteration_findings(case: Case) -> list[Finding]:
    """What the troubled stretches show: one finding a cause, and one for what none explains."""
    judged: dict[str, list[Judgement]] = {}
    open_stretches: list[Stretch] = []
    for stretch in case.troubled:
        for cause in STRETCH_CAUSES if case.readable(stretch) else ():
            judgement = cause.judge(case, stretch)
            if judgement is not None:
                judged.setdefault(cause.code, []).append(judgement)
                break
        else:
            open_stretches.append(stretch)
    findings = [cause.finding(case, tuple(judged[cause.code])) for cause in STRETCH_CAUSES if cause.code in judged]
    explained = sum(judgement.stretch.length for group in judged.values() for judgement in group)
    left = sum(stretch.length for stretch in open_stretches)
    if case.in_trouble and left >= explained:
        findings.append(unexplained(case, confidence=0.3))
    # The cause of most sweeps first; within a rank the sort by confidence below keeps this order for ties.
    weight = {code: sum(j.stretch.length for j in group) for code, group in judged.items()}
    return sorted(findings, key=lambda finding: -weight.get(finding.cause, 0))


def _order(finding: Finding) -> tuple[int, bool]:
    tried = finding.remedy.result if finding.remedy is not None else None
    return (int(finding.rank), tried is not None and not tried.helped)
