"""The record of a run: every step and deflation, checkpoints, any earlier state rebuilt, saved and reopened,
or kept in a directory while it goes on."""

from __future__ import annotations

from schurbench.journal.records import (
    Deflation,
    DeflationKind,
    Progress,
    Rotation,
    Settings,
    State,
    Step,
    StepKind,
    Stop,
    StopReason,
)
from schurbench.journal.run import Run
from schurbench.journal.saved import is_run, open_run

__all__ = [
    "Deflation",
    "DeflationKind",
    "Progress",
    "Rotation",
    "Run",
    "Settings",
    "State",
    "Step",
    "StepKind",
    "Stop",
    "StopReason",
    "is_run",
    "open_run",
]
