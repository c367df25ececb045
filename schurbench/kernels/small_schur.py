"""Schur form of a small Hessenberg matrix in one call: what happens inside a deflation window.

Nobody chooses shifts or tests here, so this is the one place where a kernel runs to convergence by itself: double shifts
on a real matrix, Wilkinson shifts on a complex one, the Ahues–Tisseur test, exceptional shifts every ten sweeps.
"""

from __future__ import annotations

import cmath
import math

import numpy as np

from schurbench.kernels._jit import compiled
from schurbench.kernels.blocks import scan_up, scan_up_complex, standardise_pair
from schurbench.kernels.sweeps import double_shift_sweeps, single_shift_steps_complex

__all__ = ["small_schur", "small_schur_complex"]

_PATIENCE = 10


@compiled
def small_schur(T, Qh, V, norm, salt):
    """Real Schur form in place: on return T is quasi-triangular and the rows of Qh were transformed along.

    Parameters
    ----------
    T : (m, m) float64, upper Hessenberg; Qh : (m, m) float64
    V : (1, m, 3) float64
        Room for reflectors.
    norm : float
        Frobenius norm of T.
    salt : int

    Returns
    -------
    bool
        False when 30 max(10, m) sweeps were not enough.
    """
    m = T.shape[0]
    pair = np.empty((1, 2), dtype=np.complex128)
    lo, hi, waited = 0, m, 0
    for sweep in range(30 * max(10, m)):
        while hi > 0:
            row, _, _ = scan_up(T, lo, hi, 1, -1.0, norm)
            if hi - row > 2:
                if row > lo:
                    T[row, row - 1] = 0.0
                    waited = 0
                lo = row
                break
            if row > 0:
                T[row, row - 1] = 0.0
            if hi - row == 2:
                standardise_pair(T, Qh, row)
            lo, hi, waited = 0, row, 0
        if hi == 0:
            return True
        i = hi - 1
        waited += 1
        if waited % _PATIENCE == 0:
            size = abs(T[i, i - 1]) + abs(T[i - 1, i - 2])
            re1 = re2 = T[i, i] + 0.75 * size
            im1 = math.sqrt(0.4375) * size
            im2 = -im1
        else:
            a, b, c, d = T[i - 1, i - 1], T[i - 1, i], T[i, i - 1], T[i, i]
            half = 0.5 * (a - d)
            disc = half * half + b * c
            if disc < 0.0:
                re1 = re2 = d + half
                im1 = math.sqrt(-disc)
                im2 = -im1
            else:
                root = half + math.copysign(math.sqrt(disc), half)
                re1 = d - b * c / root if root != 0.0 else d
                re2 = d + root
                im1 = im2 = 0.0
        pair[0, 0], pair[0, 1] = complex(re1, im1), complex(re2, im2)
        double_shift_sweeps(T, Qh, lo, hi, pair, V, salt + sweep)
    return False


@compiled
def small_schur_complex(T, Qh, C, S, norm, salt):
    """Complex Schur form in place, matrices in planes; parameters and result as above, C (1, m) and S (1, 2, m) for room."""
    R, I = T[0], T[1]
    m = R.shape[0]
    one = np.empty(1, dtype=np.complex128)
    lo, hi, waited = 0, m, 0
    for sweep in range(30 * max(10, m)):
        while hi > 0:
            row, _, _ = scan_up_complex(T, lo, hi, 1, -1.0, norm)
            if hi - row > 1:
                if row > lo:
                    R[row, row - 1] = I[row, row - 1] = 0.0
                    waited = 0
                lo = row
                break
            if row > 0:
                R[row, row - 1] = I[row, row - 1] = 0.0
            lo, hi, waited = 0, row, 0
        if hi == 0:
            return True
        i = hi - 1
        waited += 1
        d = complex(R[i, i], I[i, i])
        shift = d
        if waited % _PATIENCE == 0:
            shift = d + 0.75 * math.hypot(R[i, i - 1], I[i, i - 1])
        else:
            product = complex(R[i - 1, i], I[i - 1, i]) * complex(R[i, i - 1], I[i, i - 1])
            half = 0.5 * (complex(R[i - 1, i - 1], I[i - 1, i - 1]) - d)
            root = cmath.sqrt(half * half + product)
            pivot = half + root if abs(half + root) > abs(half - root) else half - root
            if pivot != 0.0:
                shift = d - product / pivot
        one[0] = shift
        single_shift_steps_complex(T, Qh, lo, hi, one, C, S, salt + sweep)
    return False
