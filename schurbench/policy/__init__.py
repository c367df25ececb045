"""Decisions only: which shifts, which entries count as negligible, when to break out of a cycle. Never touches H."""

from __future__ import annotations

from schurbench.policy.deflation import DEFLATION_TESTS, DeflationTest, deflation_test
from schurbench.policy.exceptional import EXCEPTIONAL_PERIOD, exceptional_shifts
from schurbench.policy.strategies import (
    STRATEGIES,
    Francis,
    Given,
    Rayleigh,
    ShiftStrategy,
    Wilkinson,
    WindowView,
    Zero,
    strategy_for,
)

__all__ = [
    "DEFLATION_TESTS",
    "EXCEPTIONAL_PERIOD",
    "STRATEGIES",
    "DeflationTest",
    "Francis",
    "Given",
    "Rayleigh",
    "ShiftStrategy",
    "Wilkinson",
    "WindowView",
    "Zero",
    "deflation_test",
    "exceptional_shifts",
    "strategy_for",
]
