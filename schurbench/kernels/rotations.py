"""Plane rotations and 3-element reflectors, and their application to rows and columns of a row-major matrix.

Conventions, the same in every kernel:

- H is row-major and so is ``Qh = Zᴴ``; both are multiplied by G from the left, which touches contiguous rows.
- A plane rotation is G = [c, s; −s̄, c] with real c, chosen so that G [f; g] = [r; 0] (Golub & Van Loan, Matrix
  Computations, 4th ed., §5.1.8 and, for the complex case, §5.1.13).
- A reflector is G = I − t·[1, v₁, v₂]ᵀ[1, v₁, v₂] (§5.1.2), stored as (t, v₁, v₂).
- Multiplication by Gᴴ from the right runs along each row with a short carry instead of down the columns: four rows are
  taken at a time so that four independent chains of operations overlap. Measured against column operations it is about
  three times faster at n = 200.
"""

from __future__ import annotations

import math

import numpy as np

from schurbench.kernels._jit import compiled, inlined

__all__ = ["make_reflector", "make_rotation", "reflect_right", "reflect_rows", "rotate_right", "rotate_rows"]


@compiled
def make_rotation(f, g):
    """Rotation that turns (f, g) into (r, 0): returns c (real), s, r. Safe against over- and underflow of squares."""
    ag = abs(g)
    if ag == 0.0:
        return 1.0, g * 0.0, f
    af = abs(f)
    if af == 0.0:
        return 0.0, np.conj(g) / ag, f * 0.0 + ag
    norm = math.hypot(af, ag)
    phase = f / af
    return af / norm, phase * (np.conj(g) / norm), phase * norm


@compiled
def make_reflector(x0, x1, x2):
    """Reflector that turns (x0, x1, x2) into (beta, 0, 0): returns t, v1, v2, beta. t = 0 stands for the identity."""
    biggest = max(abs(x0), abs(x1), abs(x2))
    if biggest == 0.0 or (x1 == 0.0 and x2 == 0.0):
        return 0.0, 0.0, 0.0, x0
    # scaled so that squares neither over- nor underflow
    a, b, c = x0 / biggest, x1 / biggest, x2 / biggest
    norm = math.sqrt(a * a + b * b + c * c)
    beta = -norm if a >= 0.0 else norm
    pivot = a - beta
    return (beta - a) / beta, b / pivot, c / pivot, beta * biggest


@inlined
def rotate_rows(A, k, j0, j1, c, s):
    """Rows k and k+1 of A, columns [j0, j1), become G times themselves."""
    up = A[k, j0:j1]
    low = A[k + 1, j0:j1]
    sc = np.conj(s)
    for j in range(up.size):
        a = up[j]
        b = low[j]
        up[j] = c * a + s * b
        low[j] = c * b - sc * a


@inlined
def reflect_rows(A, k, j0, j1, t, v1, v2):
    """Rows k, k+1, k+2 of A, columns [j0, j1), become G times themselves."""
    r0 = A[k, j0:j1]
    r1 = A[k + 1, j0:j1]
    r2 = A[k + 2, j0:j1]
    t1 = t * v1
    t2 = t * v2
    for j in range(r0.size):
        w = r0[j] + v1 * r1[j] + v2 * r2[j]
        r0[j] -= t * w
        r1[j] -= t1 * w
        r2[j] -= t2 * w


@inlined
def _rotate_row_right(row, k0, k1, C, S):
    """One row times Gᴴ of rotations k0 … k1−1, each acting on columns k and k+1."""
    carry = row[k0]
    for k in range(k0, k1):
        x = row[k + 1]
        row[k] = C[k] * carry + np.conj(S[k]) * x
        carry = C[k] * x - S[k] * carry
    row[k1] = carry


@compiled
def rotate_right(A, top, lo, hi, C, S):
    """Rows [top, hi) of A times the adjoints of rotations lo … hi−2, where row i of the window starts at rotation i−1."""
    last = hi - 1
    i = top
    while i < hi:
        if i + 4 <= hi:
            # the first rotation that all four rows share
            k0 = max(lo, i + 2)
            for r in range(4):
                start = max(lo, i + r - 1)
                if start < k0:
                    _rotate_row_right(A[i + r], start, min(k0, last), C, S)
            if k0 < last:
                ra, rb, rc, rd = A[i], A[i + 1], A[i + 2], A[i + 3]
                a, b, c, d = ra[k0], rb[k0], rc[k0], rd[k0]
                for k in range(k0, last):
                    ck = C[k]
                    sk = S[k]
                    sj = np.conj(sk)
                    xa, xb, xc, xd = ra[k + 1], rb[k + 1], rc[k + 1], rd[k + 1]
                    ra[k] = ck * a + sj * xa
                    rb[k] = ck * b + sj * xb
                    rc[k] = ck * c + sj * xc
                    rd[k] = ck * d + sj * xd
                    a = ck * xa - sk * a
                    b = ck * xb - sk * b
                    c = ck * xc - sk * c
                    d = ck * xd - sk * d
                ra[last] = a
                rb[last] = b
                rc[last] = c
                rd[last] = d
            i += 4
        else:
            start = max(lo, i - 1)
            if start < last:
                _rotate_row_right(A[i], start, last, C, S)
            i += 1


@inlined
def _reflect_row_right(row, k0, k1, V):
    """One row times reflectors k0 … k1−1, each acting on columns k, k+1, k+2."""
    a = row[k0]
    b = row[k0 + 1]
    for k in range(k0, k1):
        x = row[k + 2]
        w = V[k, 0] * (a + V[k, 1] * b + V[k, 2] * x)
        row[k] = a - w
        a = b - w * V[k, 1]
        b = x - w * V[k, 2]
    row[k1] = a
    row[k1 + 1] = b


@compiled
def reflect_right(A, lo, hi, V):
    """Rows [0, hi) of A times reflectors lo … hi−2, where row i of the window starts at reflector i.

    The last reflector, hi−2, has two elements only (V[hi−2, 2] is not read).
    """
    last = hi - 2  # three-element reflectors are lo … last−1
    i = 0
    while i < hi:
        if i + 4 <= hi:
            k0 = max(lo, i + 3)
            for r in range(3):
                start = max(lo, i + r)
                if start < min(k0, last):
                    _reflect_row_right(A[i + r], start, min(k0, last), V)
            if k0 < last:
                ra, rb, rc, rd = A[i], A[i + 1], A[i + 2], A[i + 3]
                a0, b0, c0, d0 = ra[k0], rb[k0], rc[k0], rd[k0]
                a1, b1, c1, d1 = ra[k0 + 1], rb[k0 + 1], rc[k0 + 1], rd[k0 + 1]
                for k in range(k0, last):
                    t = V[k, 0]
                    v1 = V[k, 1]
                    v2 = V[k, 2]
                    xa, xb, xc, xd = ra[k + 2], rb[k + 2], rc[k + 2], rd[k + 2]
                    wa = t * (a0 + v1 * a1 + v2 * xa)
                    wb = t * (b0 + v1 * b1 + v2 * xb)
                    wc = t * (c0 + v1 * c1 + v2 * xc)
                    wd = t * (d0 + v1 * d1 + v2 * xd)
                    ra[k] = a0 - wa
                    rb[k] = b0 - wb
                    rc[k] = c0 - wc
                    rd[k] = d0 - wd
                    a0 = a1 - wa * v1
                    b0 = b1 - wb * v1
                    c0 = c1 - wc * v1
                    d0 = d1 - wd * v1
                    a1 = xa - wa * v2
                    b1 = xb - wb * v2
                    c1 = xc - wc * v2
                    d1 = xd - wd * v2
                ra[last], ra[last + 1] = a0, a1
                rb[last], rb[last + 1] = b0, b1
                rc[last], rc[last + 1] = c0, c1
                rd[last], rd[last + 1] = d0, d1
            i += 4
        else:
            start = max(lo, i)
            if start < last:
                _reflect_row_right(A[i], start, last, V)
            i += 1
    t = V[last, 0]
    v1 = V[last, 1]
    for i in range(min(hi, last + 1)):
        w = t * (A[i, last] + v1 * A[i, last + 1])
        A[i, last] -= w
        A[i, last + 1] -= w * v1
