"""Decisions only: which shifts, which entries count as negligible, when to break out of a cycle. Never touches H."""

from __future__ import annotations

from schurbench.policy.choose import BUILT_IN, MULTISHIFT_FROM, STRATEGIES, strategy_for
from schurbench.policy.deflation import DEFLATION_TESTS, DeflationTest, deflation_test
from schurbench.policy.exceptional import EXCEPTIONAL_PERIOD, exceptional_shifts
from schurbench.policy.multishift import Multishift
from schurbench.policy.proposals import checked_proposal
from schurbench.policy.strategies import (
    Francis,
    Given,
    Rayleigh,
    ShiftStrategy,
    Wilkinson,
    WindowView,
    Zero,
)

__all__ = [
    "BUILT_IN",
    "DEFLATION_TESTS",
    "EXCEPTIONAL_PERIOD",
    "MULTISHIFT_FROM",
    "STRATEGIES",
    "DeflationTest",
    "Francis",
    "Given",
    "Multishift",
    "Rayleigh",
    "ShiftStrategy",
    "Wilkinson",
    "WindowView",
    "Zero",
    "checked_proposal",
    "deflation_test",
    "exceptional_shifts",
    "strategy_for",
]
