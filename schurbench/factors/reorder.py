"""Chosen eigenvalues to the top of T, by LAPACK's ``trsen`` and ``trexc``."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.linalg import lapack

from schurbench.errors import SettingsError
from schurbench.factors.triangular import Array, diagonal_blocks, eigenvalues_of

__all__ = ["REGIONS", "RefusedSwap", "Selection", "bring_to_top", "choose"]

Flags = npt.NDArray[np.bool_]
Complex = npt.NDArray[np.complex128]
Selection = str | Callable[[Any], Any] | Iterable[int]


def _left_half_plane(values: Complex) -> Flags:
    return np.asarray(values.real < 0.0)


def _unit_disc(values: Complex) -> Flags:
    return np.asarray(np.abs(values) < 1.0)


def _onto_imaginary_axis(values: Complex) -> Complex:
    return np.asarray(values.imag * 1j, dtype=np.complex128)


def _onto_unit_circle(values: Complex) -> Complex:
    size = np.abs(values)
    return np.asarray(np.where(size > 0.0, values, 1.0) / np.where(size > 0.0, size, 1.0), dtype=np.complex128)


#: Name of a region: which eigenvalues lie in it, the nearest point of its boundary, what the boundary is called.
REGIONS: dict[str, tuple[Callable[[Complex], Flags], Callable[[Complex], Complex], str]] = {
    "left-half-plane": (_left_half_plane, _onto_imaginary_axis, "the imaginary axis"),
    "unit-disc": (_unit_disc, _onto_unit_circle, "the unit circle"),
}


@dataclass(frozen=True, slots=True)
class RefusedSwap:
    """Two neighbouring blocks that LAPACK would not exchange, because rounding could not keep them apart.

    Attributes
    ----------
    selected : complex
        Eigenvalue that was to move up.
    blocker : complex
        Eigenvalue above it, which stays above.
    """

    selected: complex
    blocker: complex


def choose(selection: Selection, eigenvalues: Complex) -> Flags:
    """Which eigenvalues a selection means, before pairs are completed.

    Parameters
    ----------
    selection : str, callable or iterable of int
        ``"left-half-plane"`` (Re λ < 0), ``"unit-disc"`` (|λ| < 1), a predicate on λ (called on the whole array if
        it takes one, else on each eigenvalue), or row indices of T.
    eigenvalues : (n,) ndarray of complex

    Raises
    ------
    SettingsError
        Unknown region, an index out of range, or a predicate whose answers are not one truth value each.
    """
    n = eigenvalues.size
    if isinstance(selection, str):
        if selection not in REGIONS:
            known = ", ".join(REGIONS)
            raise SettingsError(f"region {selection!r} is unknown; use one of {known}, a predicate or indices")
        return REGIONS[selection][0](eigenvalues)
    if callable(selection):
        return _ask(selection, eigenvalues)
    indices = np.asarray(list(selection))
    if indices.size == 0:
        return np.zeros(n, dtype=np.bool_)
    if indices.dtype == np.bool_ and indices.shape == (n,):
        return np.asarray(indices)
    if not np.issubdtype(indices.dtype, np.integer) or indices.ndim != 1:
        raise SettingsError("indices to reorder by must be whole numbers: rows of T, counted from 0")
    wrong = indices[(indices < 0) | (indices >= n)]
    if wrong.size:
        raise SettingsError(f"index {int(wrong[0])} is not a row of T; rows run from 0 to {n - 1}")
    flags = np.zeros(n, dtype=np.bool_)
    flags[indices] = True
    return flags


def _ask(predicate: Callable[[Any], Any], eigenvalues: Complex) -> Flags:
    n = eigenvalues.size
    try:
        whole = np.asarray(predicate(eigenvalues.copy()))
    except (TypeError, ValueError):  # `if`, `and` and cmath functions do not take arrays
        whole = np.asarray(None)
    if whole.shape == (n,) and whole.dtype == np.bool_:
        return whole
    answers = [predicate(complex(value)) for value in eigenvalues]
    if not all(isinstance(answer, bool | np.bool_) for answer in answers):
        raise SettingsError("a predicate to reorder by must answer True or False for each eigenvalue")
    return np.array(answers, dtype=np.bool_)


def bring_to_top(t: Array, z: Array, chosen: Flags) -> tuple[Array, Array, list[RefusedSwap]]:
    """Unitary similarity of finished factors that moves the chosen rows' blocks to the top.

    Parameters
    ----------
    t, z : (n, n) ndarray
        Finished factors; both rows of a 2×2 block must be chosen alike.
    chosen : (n,) ndarray of bool

    Returns
    -------
    t, z : (n, n) ndarray, row-major
    refused : list of RefusedSwap

    Notes
    -----
    ``trsen`` (Bai & Demmel 1993) does it in one call. It stops at the first pair of blocks it cannot exchange without
    losing accuracy; then the exchanges are repeated one by one with ``trexc`` from the start, so that every other one
    is still done and the refused ones are known.
    """
    real = not np.iscomplexobj(t)
    trsen = lapack.dtrsen if real else lapack.ztrsen
    ft, fz = np.asfortranarray(t), np.asfortranarray(z)
    lwork = max(1, t.shape[0])
    result = trsen(chosen.astype(np.int32), ft, fz, job=b"N", wantq=1, lwork=lwork)
    if result[-1] == 0:
        return np.ascontiguousarray(result[0]), np.ascontiguousarray(result[1]), []
    ft, fz, refused = _exchange_one_by_one(np.array(t, order="F"), np.array(z, order="F"), chosen)
    return np.ascontiguousarray(ft), np.ascontiguousarray(fz), refused


def _exchange_one_by_one(t: Array, z: Array, chosen: Flags) -> tuple[Array, Array, list[RefusedSwap]]:
    """Each chosen block in turn, upward swap by swap, past everything that lets it."""
    form, trexc = ("complex", lapack.ztrexc) if np.iscomplexobj(t) else ("real", lapack.dtrexc)
    waiting = chosen.copy()
    refused: list[RefusedSwap] = []
    done = 0  # rows at the top that hold chosen eigenvalues
    while waiting.any():
        row, end = next((lo, hi) for lo, hi in diagonal_blocks(t) if waiting[lo])
        while row > done:
            top = row - 2 if row >= 2 and t[row - 1, row - 2] != 0 else row - 1
            t, z, info = trexc(t, z, row + 1, top + 1, overwrite_a=1, overwrite_q=1)
            if info != 0:  # refused; T and Z are as they were
                values = eigenvalues_of(t, form)
                refused.append(RefusedSwap(complex(values[row]), complex(values[top])))
                break
            waiting[top:end] = np.r_[waiting[row:end], waiting[top:row]]
            row, end = top, top + end - row
            if end - row == 2 and t[row + 1, row] == 0:
                end = row + 1  # the block fell into two real eigenvalues; the second one follows on its own
        else:
            done = end
        waiting[row:end] = False
    return t, z, refused
