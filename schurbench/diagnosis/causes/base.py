"""What a cause has to offer."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Protocol

from schurbench.diagnosis.case import Case, Stretch
from schurbench.diagnosis.finding import Finding

__all__ = ["Judgement", "RunCause", "StretchCause", "all_rows", "sweeps_of"]


@dataclass(frozen=True, slots=True)
class Judgement:
    """A cause fits a stretch.

    Attributes
    ----------
    stretch : Stretch
    rows : (int, int)
        Rows of H concerned, half-open.
    confidence : float
    evidence : dict of str to float
    """

    stretch: Stretch
    rows: tuple[int, int]
    confidence: float
    evidence: dict[str, float] = field(default_factory=dict)


class StretchCause(Protocol):
    """A cause of slow iteration, judged stretch by stretch."""

    code: str

    def judge(self, case: Case, stretch: Stretch) -> Judgement | None:
        """The evidence if the signature fits the stretch, otherwise None."""
        ...

    def finding(self, case: Case, judgements: tuple[Judgement, ...]) -> Finding:
        """One finding for all stretches it explains, the longest first."""
        ...


class RunCause(Protocol):
    """A cause seen in the matrix or in the run as a whole."""

    code: str

    def finding(self, case: Case) -> Finding | None:
        """The finding if it applies."""
        ...


def all_rows(judgements: tuple[Judgement, ...]) -> tuple[int, ...]:
    """Rows of all judgements together, ascending."""
    return tuple(sorted({row for judgement in judgements for row in range(*judgement.rows)}))


def sweeps_of(judgements: tuple[Judgement, ...]) -> tuple[int, ...]:
    """First and last step of every stretch, in order."""
    ordered = sorted(judgements, key=lambda judgement: judgement.stretch.first)
    return tuple(step for judgement in ordered for step in (judgement.stretch.first, judgement.stretch.last))


def more_stretches(judgements: tuple[Judgement, ...]) -> str:
    """A half-sentence on the further stretches that the same cause explains."""
    others = judgements[1:]
    if not others:
        return ""
    sweeps = sum(judgement.stretch.length for judgement in others)
    many = "another stretch" if len(others) == 1 else f"{len(others)} more stretches"
    return f" The same holds for {many} of {sweeps} sweeps{'' if len(others) == 1 else ' together'}."
