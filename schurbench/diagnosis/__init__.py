"""Why a run was slow or failed: causes with evidence, a forecast, and remedies that can be run."""

from __future__ import annotations

from schurbench.diagnosis.diagnose import diagnose
from schurbench.diagnosis.finding import (
    ClusterRemedy,
    Diagnosis,
    Finding,
    Rank,
    RemedyResult,
    SettingsRemedy,
    SolverRemedy,
    solve_structured,
)
from schurbench.diagnosis.forecast import Forecast

__all__ = [
    "ClusterRemedy",
    "Diagnosis",
    "Finding",
    "Forecast",
    "Rank",
    "RemedyResult",
    "SettingsRemedy",
    "SolverRemedy",
    "diagnose",
    "solve_structured",
]
