"""One step or sweep of each kind on an explicit half-open window [lo, hi) of H; the rest of H and Zᴴ follow in one go.

Preconditions of every kernel: H is square, row-major, upper Hessenberg; ``Qh`` (= Zᴴ) is row-major with as many columns,
or has no rows when Z is not wanted; H[lo, lo−1] = 0 and H[hi, hi−1] = 0 where these entries exist. Complex matrices come
as two planes (see `planes`).

A sweep works on the window alone, where its rotations are found; the columns right of the window, the rows above it and
Zᴴ take them afterwards (`rest`).
"""

from __future__ import annotations

from schurbench.kernels._jit import compiled
from schurbench.kernels.rest import reflect_rest, rotate_rest, rotate_rest_complex
from schurbench.kernels.rotations import (
    make_reflector,
    make_rotation,
    make_rotation_complex,
    reflect_right,
    reflect_rows,
    rotate_right,
    rotate_right_complex,
    rotate_rows,
    rotate_rows_complex,
)

__all__ = ["APART", "double_shift_sweeps", "single_shift_steps", "single_shift_steps_complex"]

#: The i-th shift of a step rounds as if the step had this many times i added to its index, so that no two round alike.
APART = 7919


@compiled
def _single_shift_step(H, lo, hi, shift, C, S, salt):
    """H − σI = QR by rotations from the left, then RQ + σI by the same from the right, on the window alone."""
    for i in range(lo, hi):
        H[i, i] -= shift
    for k in range(lo, hi - 1):
        c, s, r = make_rotation(H[k, k], H[k + 1, k], salt, k)
        C[k] = c
        S[k] = s
        H[k, k] = r
        H[k + 1, k] = 0.0
        rotate_rows(H, k, k + 1, hi, c, s)
    rotate_right(H, lo, hi, lo, hi, C, S)
    for i in range(lo, hi):
        H[i, i] += shift


@compiled
def single_shift_steps(H, Qh, lo, hi, shifts, C, S, salt):
    """Explicit single-shift QR steps, one for each shift.

    Golub & Van Loan, Matrix Computations, 4th ed., §7.4.2 (QR step for a Hessenberg matrix) with a shift, §7.5.1.

    Parameters
    ----------
    H, Qh : (n, n) float64 arrays, changed in place
    lo, hi : int
        Window, hi − lo ≥ 2.
    shifts : (m,) float64 array
    C, S : (m, n) float64 arrays
        Receive the rotations lo … hi−2 of each step: rows k, k+1 were multiplied by [C_k, S_k; −S_k, C_k].
    salt : int
        Index of the step, by which the last bits of the rotations are rounded in turn (see `rotations`).

    Returns
    -------
    int
        Number of rotations, m (hi − lo − 1).
    """
    m = shifts.size
    for b in range(m):
        _single_shift_step(H, lo, hi, shifts[b], C[b], S[b], salt + APART * b)
        rotate_rest(H, Qh, lo, hi, C[b], S[b])
    return m * (hi - lo - 1)


@compiled
def _single_shift_step_complex(H, lo, hi, shift, C, S, salt):
    """The same for a complex matrix in planes."""
    Hr, Hi = H[0], H[1]
    for i in range(lo, hi):
        Hr[i, i] -= shift.real
        Hi[i, i] -= shift.imag
    for k in range(lo, hi - 1):
        f = complex(Hr[k, k], Hi[k, k])
        g = complex(Hr[k + 1, k], Hi[k + 1, k])
        c, s, r = make_rotation_complex(f, g, salt, k)
        C[k] = c
        S[0, k], S[1, k] = s.real, s.imag
        Hr[k, k], Hi[k, k] = r.real, r.imag
        Hr[k + 1, k] = Hi[k + 1, k] = 0.0
        rotate_rows_complex(Hr, Hi, k, k + 1, hi, c, s.real, s.imag)
    rotate_right_complex(Hr, Hi, lo, hi, lo, hi, C, S[0], S[1])
    for i in range(lo, hi):
        Hr[i, i] += shift.real
        Hi[i, i] += shift.imag


@compiled
def single_shift_steps_complex(H, Qh, lo, hi, shifts, C, S, salt):
    """The same for a complex matrix in planes.

    Parameters
    ----------
    H, Qh : (2, n, n) float64 arrays, changed in place
    lo, hi : int
        Window, hi − lo ≥ 2.
    shifts : (m,) complex128 array
    C : (m, n) float64 array; S : (m, 2, n) float64 array
        Receive the rotations: rows k, k+1 were multiplied by [c, s; −conj(s), c] with s = S[b, 0, k] + i S[b, 1, k].
    salt : int
        As above.

    Returns
    -------
    int
        Number of rotations, m (hi − lo − 1).
    """
    m = shifts.size
    for b in range(m):
        _single_shift_step_complex(H, lo, hi, shifts[b], C[b], S[b], salt + APART * b)
        rotate_rest_complex(H, Qh, lo, hi, C[b], S[b])
    return m * (hi - lo - 1)


@compiled
def _double_shift_sweep(H, lo, hi, re1, im1, re2, im2, V, salt):
    """A bulge chased down the window by 3-element reflectors, on the window alone.

    When reflector k is known, only rows k+1 … k+3 must have it applied from the right at once, because only they feed
    later reflectors. All other rows take their reflectors from the right in one pass at the end, along the rows.
    """
    # first column of (H − σ₁I)(H − σ₂I), scaled against over- and underflow
    h11, h12 = H[lo, lo], H[lo, lo + 1]
    h21, h22, h32 = H[lo + 1, lo], H[lo + 1, lo + 1], H[lo + 2, lo + 1]
    scale = abs(h11 - re2) + abs(im2) + abs(h21)
    if scale == 0.0:
        x0, x1, x2 = 0.0, 0.0, 0.0
    else:
        h21s = h21 / scale
        x0 = h21s * h12 + (h11 - re1) * ((h11 - re2) / scale) - im1 * (im2 / scale)
        x1 = h21s * (h11 + h22 - re1 - re2)
        x2 = h21s * h32
    for k in range(lo, hi - 2):
        if k > lo:
            x0, x1, x2 = H[k, k - 1], H[k + 1, k - 1], H[k + 2, k - 1]
        t, v1, v2, beta = make_reflector(x0, x1, x2, salt, k)
        V[k, 0], V[k, 1], V[k, 2] = t, v1, v2
        if k > lo:
            H[k, k - 1] = beta
            H[k + 1, k - 1] = 0.0
            H[k + 2, k - 1] = 0.0
        reflect_rows(H, k, k, hi, t, v1, v2)
        for i in range(k + 1, min(k + 4, hi)):
            w = t * (H[i, k] + v1 * H[i, k + 1] + v2 * H[i, k + 2])
            H[i, k] -= w
            H[i, k + 1] -= w * v1
            H[i, k + 2] -= w * v2
    k = hi - 2
    t, v1, v2, beta = make_reflector(H[k, k - 1], H[k + 1, k - 1], 0.0, salt, k)
    V[k, 0], V[k, 1], V[k, 2] = t, v1, 0.0
    H[k, k - 1] = beta
    H[k + 1, k - 1] = 0.0
    for j in range(k, hi):
        w = t * (H[k, j] + v1 * H[k + 1, j])
        H[k, j] -= w
        H[k + 1, j] -= w * v1
    w = t * (H[k + 1, k] + v1 * H[k + 1, k + 1])
    H[k + 1, k] -= w
    H[k + 1, k + 1] -= w * v1
    reflect_right(H, lo, hi, lo, hi, V)


@compiled
def double_shift_sweeps(H, Qh, lo, hi, shifts, V, salt):
    """Implicit double-shift sweeps in real arithmetic, one bulge for each pair of shifts.

    Francis 1961/62; Golub & Van Loan, Matrix Computations, 4th ed., §7.5.4–7.5.5 (Algorithm 7.5.1).

    Parameters
    ----------
    H, Qh : (n, n) float64 arrays, changed in place
    lo, hi : int
        Window, hi − lo ≥ 3.
    shifts : (m, 2) complex128 array
        In each row both real, or a conjugate pair.
    V : (m, n, 3) float64 array
        Receives the reflectors lo … hi−2 of each sweep as (t, v₁, v₂).
    salt : int
        As above.

    Returns
    -------
    int
        Number of reflectors, m (hi − lo − 1).
    """
    m = shifts.shape[0]
    for b in range(m):
        first, second = shifts[b, 0], shifts[b, 1]
        _double_shift_sweep(H, lo, hi, first.real, first.imag, second.real, second.imag, V[b], salt + 2 * APART * b)
        reflect_rest(H, Qh, lo, hi, V[b])
    return m * (hi - lo - 1)
