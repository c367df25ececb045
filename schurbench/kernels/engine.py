"""Carry out what was decided on a matrix in the kernels' own layout (see `planes`): one sweep, one scan, one deflation.

Shared by the iteration and by replay, which gives the same bytes because nothing else changes H.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from schurbench.kernels.blocks import (
    copy_bands,
    copy_bands_complex,
    scan_up,
    scan_up_complex,
    standardise_pair,
)
from schurbench.kernels.sweeps import double_shift_sweeps, single_shift_steps, single_shift_steps_complex
from schurbench.kernels.workspace import Workspace

__all__ = ["bands", "deflate", "scan", "sweep"]


def sweep(
    H: np.ndarray, Qh: np.ndarray, work: Workspace, window: tuple[int, int], shifts: Sequence[complex], index: int
) -> int:
    """One sweep on the window; returns the number of rotations (reflectors for a double shift).

    One shift is an explicit single-shift step. More are taken two by two, in implicit double-shift sweeps, on a real H,
    and in single-shift steps on a complex one. ``index`` is that of the step, by which last bits are rounded in turn.
    """
    lo, hi = window
    m = len(shifts)
    if H.ndim == 3:
        work.singles(m)
        return single_shift_steps_complex(H, Qh, lo, hi, np.array(shifts, dtype=complex), work.C, work.S, index)
    if m == 1:
        return single_shift_steps(H, Qh, lo, hi, np.array([shifts[0].real]), work.C, work.S, index)
    work.doubles(m // 2)
    return double_shift_sweeps(H, Qh, lo, hi, np.array(shifts, dtype=complex).reshape(-1, 2), work.V, index)


def scan(H: np.ndarray, window: tuple[int, int], test: int, tol: float, norm: float) -> tuple[int, float, float]:
    """Row, magnitude and threshold of the lowest negligible subdiagonal entry; see `blocks.scan_up`."""
    lo, hi = window
    look = scan_up if H.ndim == 2 else scan_up_complex
    return look(H, lo, hi, test, tol, norm)


def deflate(H: np.ndarray, Qh: np.ndarray, row: int, size: int) -> tuple[complex, ...]:
    """Set h[row, row−1] to zero; for a split-off block of one or two rows, finish it and return its eigenvalues.

    Parameters
    ----------
    row : int
        First row split off.
    size : int
        1 or 2 for a finished block (2 only on a real H); 0 for a split of the window.
    """
    if row > 0:
        H[..., row, row - 1] = 0.0
    if size == 2:
        re1, im1, re2, im2 = standardise_pair(H, Qh, row)
        return (complex(re1, im1), complex(re2, im2))
    if size == 1:
        return (complex(*H[..., row, row]) if H.ndim == 3 else complex(H[row, row]),)
    return ()


def bands(H: np.ndarray, lo: int, hi: int, out: np.ndarray) -> None:
    """Copy diagonal, subdiagonal and superdiagonal of rows [lo, hi) of H into ``out``; see `blocks.copy_bands`."""
    if H.ndim == 2:
        copy_bands(H, lo, hi, out)
    else:
        copy_bands_complex(H, lo, hi, out)
