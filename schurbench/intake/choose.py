"""Which array of a file that holds several."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from schurbench.errors import InputError
from schurbench.intake.checks import one_line

__all__ = ["Candidate", "choose"]

_LISTED = 12


@dataclass(frozen=True, slots=True)
class Candidate:
    """An array in a file, known by its header only.

    Attributes
    ----------
    name : str
    shape : tuple of int
    refusal : str or None
        A few words on why it cannot be a matrix, e.g. ``"text"``; None when it holds numbers.
    """

    name: str
    shape: tuple[int, ...]
    refusal: str | None = None

    @property
    def is_square(self) -> bool:
        """Whether it could be the matrix: numbers, square, not empty."""
        return self.refusal is None and len(self.shape) == 2 and self.shape[0] == self.shape[1] > 0

    def __str__(self) -> str:
        size = " × ".join(map(str, self.shape)) or "scalar"
        return f"{one_line(self.name)} ({size}{'' if self.refusal is None else ', ' + self.refusal})"


def choose(candidates: Sequence[Candidate], key: str | None, what: str) -> tuple[str, tuple[str, ...]]:
    """The name to read, with a sentence when the choice was not the user's.

    Raises
    ------
    InputError
        When the key is not there, or without a key when no array or several arrays are square.
    """
    names = [candidate.name for candidate in candidates]
    if key is not None:
        if key not in names:
            raise InputError(f"{what} has no array named {one_line(repr(key))}; it holds {_listing(candidates)}")
        return key, ()
    if not candidates:
        raise InputError(f"{what} holds no arrays; name another file")
    if len(candidates) == 1:
        return names[0], ()
    square = [candidate for candidate in candidates if candidate.is_square]
    if not square:
        raise InputError(f"{what} holds no square array of numbers, only {_listing(candidates)}")
    if len(square) > 1:
        raise InputError(f"{what} holds {len(square)} square arrays: {_listing(square)}; choose one with key")
    return square[0].name, (
        f"{square[0]} was taken: the only square array of numbers among the {len(candidates)} in the file.",
    )


def _listing(candidates: Sequence[Candidate]) -> str:
    shown = ", ".join(str(candidate) for candidate in candidates[:_LISTED])
    return shown if len(candidates) <= _LISTED else f"{shown} and {len(candidates) - _LISTED} more"
