"""What is outside the window takes the rotations of a step: columns right of it, rows above it, and Zᴴ.

Nothing here feeds back into the sweeps. Going through Zᴴ in blocks of columns that stay in a cache, with all shifts of a
step for each block, was tried and is no faster: the loops are bound by arithmetic (0.34 ns a number without blocks at
n = 1000, 0.38 to 0.67 with blocks of 128 to 16 columns).
"""

from __future__ import annotations

from schurbench.kernels._jit import compiled
from schurbench.kernels.rotations import (
    reflect_right,
    reflect_rows,
    reflect_rows_twice,
    rotate_right,
    rotate_right_complex,
    rotate_rows,
    rotate_rows_complex,
)

__all__ = ["reflect_rest", "rotate_rest", "rotate_rest_complex"]


@compiled
def _reflect_columns(A, lo, hi, j0, j1, V):
    """All reflectors of one sweep on columns [j0, j1) of rows [lo, hi)."""
    k = lo
    while k + 1 < hi - 2:
        reflect_rows_twice(A, k, j0, j1, V[k, 0], V[k, 1], V[k, 2], V[k + 1, 0], V[k + 1, 1], V[k + 1, 2])
        k += 2
    if k < hi - 2:
        reflect_rows(A, k, j0, j1, V[k, 0], V[k, 1], V[k, 2])
    t, v1 = V[hi - 2, 0], V[hi - 2, 1]
    for j in range(j0, j1):
        w = t * (A[hi - 2, j] + v1 * A[hi - 1, j])
        A[hi - 2, j] -= w
        A[hi - 1, j] -= w * v1


@compiled
def reflect_rest(H, Qh, lo, hi, V):
    """The reflectors of a double-shift sweep, V (n, 3), on everything outside the window."""
    n = H.shape[0]
    _reflect_columns(H, lo, hi, hi, n, V)
    reflect_right(H, 0, lo, lo, hi, V)
    if Qh.shape[0] > 0:
        _reflect_columns(Qh, lo, hi, 0, n, V)


@compiled
def rotate_rest(H, Qh, lo, hi, C, S):
    """The rotations of a single-shift step, C and S (n,), on everything outside the window."""
    n = H.shape[0]
    for k in range(lo, hi - 1):
        rotate_rows(H, k, hi, n, C[k], S[k])
    rotate_right(H, 0, lo, lo, hi, C, S)
    if Qh.shape[0] > 0:
        for k in range(lo, hi - 1):
            rotate_rows(Qh, k, 0, n, C[k], S[k])


@compiled
def rotate_rest_complex(H, Qh, lo, hi, C, S):
    """The same for complex matrices in planes; S is (2, n)."""
    R, I = H[0], H[1]
    n = R.shape[0]
    for k in range(lo, hi - 1):
        rotate_rows_complex(R, I, k, hi, n, C[k], S[0, k], S[1, k])
    rotate_right_complex(R, I, 0, lo, lo, hi, C, S[0], S[1])
    if Qh.shape[1] > 0:
        for k in range(lo, hi - 1):
            rotate_rows_complex(Qh[0], Qh[1], k, 0, n, C[k], S[0, k], S[1, k])
