"""Schur decompositions that can be watched, explained, compared and handed on.

One matrix walks through the rooms of this package in order, and each room imports only the ones before it (the iteration and its
journal share a place). Below them all lie `schurbench.errors`, `schurbench.measures`, where the limit of a certificate is named,
and `schurbench.matching`, which pairs spectra.

1. `schurbench.intake` reads files and arrays into a `WorkingMatrix` and knows the demonstration plant.
2. `schurbench.prepare` says what kind of matrix it is (`profile`) and brings it to Hessenberg form.
3. `schurbench.kernels` holds the compiled steps: one sweep, one scan for negligible entries. No decisions.
4. `schurbench.policy` holds the decisions: which shifts, which entries are negligible. It never touches H.
5. `schurbench.iteration` puts both together: `Iteration` by hand, `iterate` as the driver.
6. `schurbench.journal` records every step, rebuilds any earlier state, and saves and reopens a `Run`.
7. `schurbench.diagnosis` names causes with evidence and a remedy that can be run.
8. `schurbench.comparison` puts several settings side by side on one matrix, or surveys many matrices.
9. `schurbench.factors` turns a run into Schur factors with a certificate, and writes them.
10. `schurbench.panels` and `schurbench.cli` are two faces on the same rooms.

DEVELOPERS.md in the repository leads one matrix through the files of these rooms. Names are loaded on first use, so
``import schurbench`` compiles nothing and imports neither numba nor widgets.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

__version__ = "0.1.0"

_HOME = {
    "load": "schurbench.intake",
    "demo_matrix": "schurbench.intake",
    "WorkingMatrix": "schurbench.intake",
    "profile": "schurbench.prepare",
    "Profile": "schurbench.prepare",
    "Iteration": "schurbench.iteration",
    "iterate": "schurbench.iteration",
    "Step": "schurbench.journal",
    "Deflation": "schurbench.journal",
    "State": "schurbench.journal",
    "StopReason": "schurbench.journal",
    "Run": "schurbench.journal",
    "open_run": "schurbench.journal",
    "Progress": "schurbench.journal",
    "diagnose": "schurbench.diagnosis",
    "Diagnosis": "schurbench.diagnosis",
    "Finding": "schurbench.diagnosis",
    "compare": "schurbench.comparison",
    "Comparison": "schurbench.comparison",
    "survey": "schurbench.comparison",
    "twin": "schurbench.comparison",
    "Factors": "schurbench.factors",
    "Certificate": "schurbench.factors",
    "Workbench": "schurbench.panels",
    "InputError": "schurbench.errors",
    "SettingsError": "schurbench.errors",
    "SchurbenchError": "schurbench.errors",
}

# Written out, because type checkers do not evaluate an expression here.
__all__ = [
    "Certificate",
    "Comparison",
    "Deflation",
    "Diagnosis",
    "Factors",
    "Finding",
    "InputError",
    "Iteration",
    "Profile",
    "Progress",
    "Run",
    "SchurbenchError",
    "SettingsError",
    "State",
    "Step",
    "StopReason",
    "Workbench",
    "WorkingMatrix",
    "__version__",
    "compare",
    "demo_matrix",
    "diagnose",
    "iterate",
    "load",
    "open_run",
    "profile",
    "survey",
    "twin",
]


def __getattr__(name: str) -> Any:
    if name in _HOME:
        value = getattr(import_module(_HOME[name]), name)
        globals()[name] = value
        return value
    raise AttributeError(f"module 'schurbench' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted(__all__)


if TYPE_CHECKING:
    from schurbench.comparison import Comparison, compare, survey, twin
    from schurbench.diagnosis import Diagnosis, Finding, diagnose
    from schurbench.errors import InputError, SchurbenchError, SettingsError
    from schurbench.factors import Certificate, Factors
    from schurbench.intake import WorkingMatrix, demo_matrix, load
    from schurbench.iteration import Iteration, iterate
    from schurbench.journal import Deflation, Progress, Run, State, Step, StopReason, open_run
    from schurbench.panels import Workbench
    from schurbench.prepare import Profile, profile
