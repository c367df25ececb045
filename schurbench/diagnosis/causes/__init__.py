"""The causes, one module each.

To add one: write the module, add its object to a tuple below, and test it on a planted case.

A cause of slow or failed iteration judges one stretch of sweeps at a time; the first in `STRETCH_CAUSES` that fits a
stretch explains it, so those with the narrower signature stand first. A cause about the whole matrix or run says at
most one thing.
"""

from __future__ import annotations

from schurbench.diagnosis.causes.base import Judgement, RunCause, StretchCause
from schurbench.diagnosis.causes.clustered import Clustered, ClusteredEigenvalues
from schurbench.diagnosis.causes.equal_moduli import EqualModuli
from schurbench.diagnosis.causes.healthy import Healthy
from schurbench.diagnosis.causes.non_normal import NonNormal
from schurbench.diagnosis.causes.poor_scaling import PoorScaling
from schurbench.diagnosis.causes.real_shift_on_pair import RealShiftOnPair
from schurbench.diagnosis.causes.reducible import Reducible
from schurbench.diagnosis.causes.scaled_window import ScaledWindow
from schurbench.diagnosis.causes.slow_ratio import SlowRatio
from schurbench.diagnosis.causes.stopped_early import StoppedEarly
from schurbench.diagnosis.causes.structure_unused import StructureUnused
from schurbench.diagnosis.causes.unexplained import unexplained

__all__ = ["RUN_CAUSES", "STRETCH_CAUSES", "Judgement", "RunCause", "StretchCause", "unexplained"]

STRETCH_CAUSES: tuple[StretchCause, ...] = (
    RealShiftOnPair(),
    EqualModuli(),
    Clustered(),
    SlowRatio(),
    ScaledWindow(),
)

RUN_CAUSES: tuple[RunCause, ...] = (
    StoppedEarly(),
    PoorScaling(),
    ClusteredEigenvalues(),
    NonNormal(),
    StructureUnused(),
    Reducible(),
    Healthy(),
)
