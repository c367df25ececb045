"""Comparison: several settings on one matrix, one setting on many matrices, one job on two kinds of machine."""

from __future__ import annotations

from schurbench.comparison.compare import Comparison, ComparisonProgress, Entry, Figures, compare
from schurbench.comparison.survey import Survey, SurveyRow, survey
from schurbench.comparison.twin import Twin, TwinJob, twin

__all__ = [
    "Comparison",
    "ComparisonProgress",
    "Entry",
    "Figures",
    "Survey",
    "SurveyRow",
    "Twin",
    "TwinJob",
    "compare",
    "survey",
    "twin",
]
