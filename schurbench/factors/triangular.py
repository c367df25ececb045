"""The form of T, read off the array itself: diagonal blocks, exact structure, eigenvalues."""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.linalg

from schurbench.errors import InputError
from schurbench.journal.records import Window
from schurbench.prepare.structure import times_power_of_two

__all__ = [
    "Array",
    "diagonal_blocks",
    "eigenvalues_of",
    "in_matrix_units",
    "is_exact",
    "restore_underflowed_blocks",
    "solve_small_blocks",
    "unfinished_windows",
]

#: float64 in the real form, complex128 in the complex one.
Array = npt.NDArray[Any]


def diagonal_blocks(t: Array) -> list[Window]:
    """Half-open row ranges between which the subdiagonal of `t` is exactly zero, from the top."""
    n = t.shape[0]
    cuts = [0, *(np.flatnonzero(np.diagonal(t, -1) == 0) + 1).tolist(), n]
    return [(lo, hi) for lo, hi in pairwise(cuts) if hi > lo]


def _is_standard(block: Array) -> bool:
    """Equal diagonal and off-diagonal entries of opposite sign (``dlanv2``'s form of a complex pair)."""
    # Signs, not the product: the product of two tiny entries underflows to zero.
    return bool(block[0, 0] == block[1, 1] and np.sign(block[0, 1]) * np.sign(block[1, 0]) == -1)


def unfinished_windows(t: Array, form: str) -> tuple[Window, ...]:
    """Windows in which `t` is only Hessenberg: coupled rows that are not a standardised 2×2 block of the real form."""
    return tuple(
        (lo, hi)
        for lo, hi in diagonal_blocks(t)
        if hi - lo > 2 or (hi - lo == 2 and not (form == "real" and _is_standard(t[lo:hi, lo:hi])))
    )


def is_exact(t: Array, form: str) -> bool:
    """Whether `t` is exactly quasi-triangular with standardised 2×2 blocks (real), or triangular (complex).

    Every entry below the diagonal that is not part of a standardised block must be an exact zero; nothing is
    compared with a tolerance.
    """
    if form == "real" and np.iscomplexobj(t):
        return False
    if np.tril(t, -2).any():
        return False
    return not unfinished_windows(t, form)


def eigenvalues_of(t: Array, form: str) -> npt.NDArray[np.complex128]:
    """Eigenvalues in the order of the rows of `t`, in its units; NaN in unfinished windows.

    Of a complex pair the one with positive imaginary part comes first.
    """
    values = np.diagonal(t).astype(np.complex128)
    for lo, hi in diagonal_blocks(t):
        if hi - lo == 1:
            continue
        block = t[lo:hi, lo:hi]
        if form == "real" and hi - lo == 2 and _is_standard(block):
            # The root of each factor, not of the product, which could over- or underflow.
            half_gap = np.sqrt(abs(block[0, 1])) * np.sqrt(abs(block[1, 0]))
            values[lo] = complex(block[0, 0], half_gap)
            values[lo + 1] = complex(block[0, 0], -half_gap)
        else:
            values[lo:hi] = complex(np.nan, np.nan)
    return values


def solve_small_blocks(t: Array, z: Array, form: str) -> int:
    """Bring every isolated 2×2 block that is not standard into final form, in place; returns how many there were.

    An isolated 2×2 block needs no iteration; LAPACK's 2×2 Schur factorisation standardises it
    (``dlanv2``; Bai & Demmel 1993, LAPACK Working Note 54, section 4).
    """
    solved = 0
    for lo, hi in unfinished_windows(t, form):
        if hi - lo != 2:
            continue
        rows = slice(lo, hi)
        block, u = scipy.linalg.schur(t[rows, rows], output="real" if form == "real" else "complex")
        if block[1, 0] != 0 and not (form == "real" and _is_standard(block)):
            continue
        t[:lo, rows] = t[:lo, rows] @ u
        t[rows, hi:] = u.conj().T @ t[rows, hi:]
        t[rows, rows] = block
        z[:, rows] = z[:, rows] @ u
        solved += 1
    return solved


def in_matrix_units(t: Array, z: Array, exponent: int, form: str) -> Array:
    """2^−exponent · T; Z follows in place should a tiny 2×2 block have to be repaired.

    Raises
    ------
    InputError
        T exceeds the range of double precision in these units.
    """
    if exponent == 0:
        return t
    with np.errstate(over="ignore", invalid="ignore"):
        t = times_power_of_two(t, -exponent)
    if not np.isfinite(t).all():
        raise InputError("T exceeds the range of double precision; divide the matrix by a power of two first")
    if form == "real":
        restore_underflowed_blocks(t, z)
    return t


def restore_underflowed_blocks(t: Array, z: Array) -> None:
    """Repair 2×2 blocks of the real form whose upper entry vanished when `t` was scaled back to tiny units, in place.

    With a zero upper and a non-zero lower entry, exchanging the two rows and columns makes the block triangular
    exactly: a rotation by a right angle rounds nothing.
    """
    for lo, hi in diagonal_blocks(t):
        if hi - lo != 2 or t[lo, lo + 1] != 0:
            continue
        for columns in (t, z):
            columns[:, [lo, lo + 1]] = columns[:, [lo + 1, lo]]
            columns[:, lo + 1] *= -1.0
        t[[lo, lo + 1], :] = t[[lo + 1, lo], :]
        t[lo + 1, :] *= -1.0
        t[lo + 1, lo] = 0.0
