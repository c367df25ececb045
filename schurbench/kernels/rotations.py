"""Plane rotations and 3-element reflectors, and their application to rows and columns of a row-major matrix.

Conventions, the same in every kernel:

- H is row-major and so is ``Qh = Zᴴ``, complex ones as two planes (see `planes`); both are multiplied by G from the left,
  which touches contiguous rows.
- A plane rotation is G = [c, s; −s̄, c] with real c, chosen so that G [f; g] = [r; 0] (Golub & Van Loan, Matrix
  Computations, 4th ed., §5.1.8 and, for the complex case, §5.1.13).
- A reflector is G = I − t·[1, v₁, v₂]ᵀ[1, v₁, v₂] (§5.1.2), stored as (t, v₁, v₂).
- Multiplication by Gᴴ from the right runs along each row with a short carry instead of down the columns. Several rows are
  taken at a time so that independent chains of operations overlap. Measured against column operations it is about three
  times faster at n = 200.
"""

from __future__ import annotations

import math

from schurbench.kernels._jit import compiled, exact, inlined

__all__ = [
    "make_reflector",
    "make_rotation",
    "make_rotation_complex",
    "reflect_right",
    "reflect_rows",
    "reflect_rows_twice",
    "rotate_right",
    "rotate_right_complex",
    "rotate_rows",
    "rotate_rows_complex",
]


# Below this an entry has lost digits to underflow: its phase and its ratios to others mean nothing, and dropping it changes
# the matrix by less than the rounding of any normal entry.
TINY = 2.0**-970

# A rotation by very nearly 90° with a cosine this small would change the other row by less than its rounding, so that the
# change is lost entry by entry, always the same way: 3600 sweeps on a skew matrix of n = 120 gave a ratio of 30. With the
# cosine dropped the rotation is an exact exchange of rows, and what is annihilated is within rounding of the pivot.
NEGLIGIBLE = 2.0**-51

# Why rounding is dithered. A stalled iteration repeats the same rotations thousands of times. Each has c² + |s|² = 1 only
# to rounding, always with the same sign, so the errors add up in Z instead of averaging out: ratios of 20 to 60 were seen
# after 30 n sweeps on Day's matrices. So the excess is computed exactly and the last bit of c and s (of t for a reflector)
# is rounded up or down in turn, as often as its remainder says: stochastic rounding (Connolly, Higham & Mary, SIAM J. Sci.
# Comput. 43, 2021) with a golden-ratio sequence in place of random numbers. It depends on the number of the sweep and the
# row only, so that replay gives the same bytes.
BELOW_ONE = 2.0**-53  # spacing of the doubles from 1/2 to 1, where the larger of c and |s| (or one part of it) lies
_GOLDEN = 0.6180339887498949
_PLASTIC = 0.7548776662466927


@inlined
def _turn(salt, k):
    """A number in [−1/2, 1/2) that covers the interval evenly over the sweeps, for rotation k of sweep ``salt``."""
    d = salt * _GOLDEN + k * _PLASTIC
    return d - math.floor(d) - 0.5


@exact
def _square(a):
    """a² as an unevaluated sum of two doubles (Dekker 1971; Higham, Accuracy and Stability, 2nd ed., §4.3)."""
    p = a * a
    t = 134217729.0 * a
    high = t - (t - a)
    low = a - high
    return p, ((high * high - p) + 2.0 * high * low) + low * low


@exact
def _product(a, b):
    """a·b as an unevaluated sum of two doubles (Dekker 1971)."""
    p = a * b
    t = 134217729.0 * a
    ah = t - (t - a)
    al = a - ah
    t = 134217729.0 * b
    bh = t - (t - b)
    bl = b - bh
    return p, ((ah * bh - p) + ah * bl + al * bh) + al * bl


@exact
def _sum(a, b):
    """a + b as an unevaluated sum of two doubles (Knuth; Higham, 2nd ed., §4.3)."""
    s = a + b
    t = s - a
    return s, (a - (s - t)) + (b - t)


@exact
def _rounded_in_turn(x, delta, turn, spacing):
    """x + delta, rounded up or down by turns between numbers that lie ``spacing`` apart; what is exact stays as it is."""
    if delta == 0.0:
        return x
    return x + (delta + turn * spacing)


@compiled
def make_rotation(f, g, salt, k):
    """Rotation that turns the real (f, g) into (r, 0): returns c, s, r. Safe against over- and underflow of squares."""
    af, ag = abs(f), abs(g)
    if ag < TINY:
        return 1.0, 0.0, f
    if af < NEGLIGIBLE * ag:
        return 0.0, math.copysign(1.0, g), ag
    norm = math.hypot(f, g)
    r = math.copysign(norm, f)
    c, s = af / norm, g / r
    # bring c² + s² to 1 on the average over many sweeps
    pc, ec = _square(c)
    ps, es = _square(s)
    excess = 0.5 * (((max(pc, ps) - 1.0) + min(pc, ps)) + (ec + es))
    if pc >= ps:
        return _rounded_in_turn(c, -excess / c, _turn(salt, k), BELOW_ONE), s, r
    return c, _rounded_in_turn(s, -excess / s, _turn(salt, k), BELOW_ONE), r


@compiled
def make_rotation_complex(f, g, salt, k):
    """The same for complex f and g: c is real, s and r are complex."""
    af, ag = abs(f), abs(g)
    if ag < TINY:
        return 1.0, complex(0.0, 0.0), f
    if af < NEGLIGIBLE * ag:
        c, s, r = 0.0, g.conjugate() / ag, complex(ag, 0.0)
    else:
        norm = math.hypot(af, ag)
        phase = f / af
        c, s, r = af / norm, phase * (g.conjugate() / norm), phase * norm
    pc, ec = _square(c)
    pr, er = _square(s.real)
    pi, ei = _square(s.imag)
    excess = 0.5 * (((pc - 1.0) + max(pr, pi)) + min(pr, pi) + (ec + (er + ei)))
    turn = _turn(salt, k)
    if pc >= 0.3:
        return _rounded_in_turn(c, -excess / c, turn, BELOW_ONE), s, r
    if pr >= pi:
        return c, complex(_rounded_in_turn(s.real, -excess / s.real, turn, BELOW_ONE), s.imag), r
    return c, complex(s.real, _rounded_in_turn(s.imag, -excess / s.imag, turn, BELOW_ONE)), r


@compiled
def make_reflector(x0, x1, x2, salt, k):
    """Reflector that turns (x0, x1, x2) into (beta, 0, 0): returns t, v1, v2, beta. t = 0 stands for the identity."""
    biggest = max(abs(x0), abs(x1), abs(x2))
    if biggest < TINY or (x1 == 0.0 and x2 == 0.0):
        return 0.0, 0.0, 0.0, x0
    # scaled so that squares neither over- nor underflow
    a, b, c = x0 / biggest, x1 / biggest, x2 / biggest
    norm = math.sqrt(a * a + b * b + c * c)
    beta = -norm if a >= 0.0 else norm
    pivot = a - beta
    v1, v2 = b / pivot, c / pivot
    # t = 2/(1 + v₁² + v₂²) from the v that will be used, so that I − t v vᵀ is orthogonal to the rounding of t
    pb, eb = _square(v1)
    pc, ec = _square(v2)
    high, low1 = _sum(pb, pc)
    high, low2 = _sum(1.0, high)
    low = low2 + (low1 + (eb + ec))
    t = 2.0 / high
    ph, pl = _product(t, high)
    delta = -((ph - 2.0) + (pl + t * low)) / high
    # |v₁|² + |v₂|² ≤ 1, so t lies between 1 and 2
    return _rounded_in_turn(t, delta, _turn(salt, k), 2.0 * BELOW_ONE), v1, v2, beta * biggest


@inlined
def rotate_rows(A, k, j0, j1, c, s):
    """Rows k and k+1 of A, columns [j0, j1), become G times themselves."""
    up = A[k, j0:j1]
    low = A[k + 1, j0:j1]
    for j in range(up.size):
        a = up[j]
        b = low[j]
        up[j] = c * a + s * b
        low[j] = c * b - s * a


@inlined
def rotate_rows_complex(R, I, k, j0, j1, c, sr, si):
    """The same for a complex matrix R + iI and s = sr + i·si."""
    ur = R[k, j0:j1]
    ui = I[k, j0:j1]
    lr = R[k + 1, j0:j1]
    li = I[k + 1, j0:j1]
    for j in range(ur.size):
        ar = ur[j]
        ai = ui[j]
        br = lr[j]
        bi = li[j]
        ur[j] = c * ar + sr * br - si * bi
        ui[j] = c * ai + sr * bi + si * br
        lr[j] = c * br - sr * ar - si * ai
        li[j] = c * bi - sr * ai + si * ar


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
def reflect_rows_twice(A, k, j0, j1, t, v1, v2, u, w1, w2):
    """Reflector (t, v) at row k and then (u, w) at row k+1 on columns [j0, j1) of A: one pass over four rows instead of
    two passes over three."""
    r0, r1, r2, r3 = A[k, j0:j1], A[k + 1, j0:j1], A[k + 2, j0:j1], A[k + 3, j0:j1]
    t1 = t * v1
    t2 = t * v2
    u1 = u * w1
    u2 = u * w2
    for j in range(r0.size):
        w = r0[j] + v1 * r1[j] + v2 * r2[j]
        r0[j] -= t * w
        a = r1[j] - t1 * w
        b = r2[j] - t2 * w
        w = a + w1 * b + w2 * r3[j]
        r1[j] = a - u * w
        r2[j] = b - u1 * w
        r3[j] -= u2 * w


@inlined
def _rotate_row_right(row, k0, k1, C, S):
    """One row times Gᴴ of rotations k0 … k1−1, each acting on columns k and k+1."""
    carry = row[k0]
    for k in range(k0, k1):
        x = row[k + 1]
        row[k] = C[k] * carry + S[k] * x
        carry = C[k] * x - S[k] * carry
    row[k1] = carry


@compiled
def rotate_right(A, top, end, lo, hi, C, S):
    """Rows [top, end) of A times the adjoints of rotations lo … hi−2, where row i of the window starts at rotation i−1."""
    last = hi - 1
    i = top
    while i < end:
        if i + 4 <= end:
            # the first rotation that all four rows share
            k0 = min(max(lo, i + 2), last)
            for r in range(4):
                start = max(lo, i + r - 1)
                if start < k0:
                    _rotate_row_right(A[i + r], start, k0, C, S)
            if k0 < last:
                ra, rb, rc, rd = A[i], A[i + 1], A[i + 2], A[i + 3]
                a, b, c, d = ra[k0], rb[k0], rc[k0], rd[k0]
                for k in range(k0, last):
                    ck = C[k]
                    sk = S[k]
                    xa, xb, xc, xd = ra[k + 1], rb[k + 1], rc[k + 1], rd[k + 1]
                    ra[k] = ck * a + sk * xa
                    rb[k] = ck * b + sk * xb
                    rc[k] = ck * c + sk * xc
                    rd[k] = ck * d + sk * xd
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
def _rotate_row_right_complex(rr, ri, k0, k1, C, Sr, Si):
    """One row rr + i·ri times Gᴴ of rotations k0 … k1−1."""
    ar, ai = rr[k0], ri[k0]
    for k in range(k0, k1):
        c, sr, si = C[k], Sr[k], Si[k]
        xr, xi = rr[k + 1], ri[k + 1]
        rr[k] = c * ar + sr * xr + si * xi
        ri[k] = c * ai + sr * xi - si * xr
        ar, ai = c * xr - sr * ar + si * ai, c * xi - sr * ai - si * ar
    rr[k1] = ar
    ri[k1] = ai


@compiled
def rotate_right_complex(R, I, top, end, lo, hi, C, Sr, Si):
    """The same for a complex matrix R + iI and rotations with s = Sr + i·Si; two rows at a time."""
    last = hi - 1
    i = top
    while i < end:
        if i + 2 <= end:
            k0 = min(max(lo, i), last)
            start = max(lo, i - 1)
            if start < k0:
                _rotate_row_right_complex(R[i], I[i], start, k0, C, Sr, Si)
            if k0 < last:
                pr, pi, qr, qi = R[i], I[i], R[i + 1], I[i + 1]
                ar, ai, br, bi = pr[k0], pi[k0], qr[k0], qi[k0]
                for k in range(k0, last):
                    c, sr, si = C[k], Sr[k], Si[k]
                    xr, xi, yr, yi = pr[k + 1], pi[k + 1], qr[k + 1], qi[k + 1]
                    pr[k] = c * ar + sr * xr + si * xi
                    pi[k] = c * ai + sr * xi - si * xr
                    qr[k] = c * br + sr * yr + si * yi
                    qi[k] = c * bi + sr * yi - si * yr
                    ar, ai = c * xr - sr * ar + si * ai, c * xi - sr * ai - si * ar
                    br, bi = c * yr - sr * br + si * bi, c * yi - sr * bi - si * br
                pr[last], pi[last] = ar, ai
                qr[last], qi[last] = br, bi
            i += 2
        else:
            start = max(lo, i - 1)
            if start < last:
                _rotate_row_right_complex(R[i], I[i], start, last, C, Sr, Si)
            i += 1


@inlined
def _reflect_row_right(row, k0, k1, V):
    """One row times reflectors k0 … k1−1, each acting on columns k, k+1, k+2."""
    p = row[k0]
    q = row[k0 + 1]
    for k in range(k0, k1):
        t, v1, v2 = V[k, 0], V[k, 1], V[k, 2]
        x = row[k + 2]
        w = (v2 * x + p) + v1 * q
        row[k] = p - t * w
        p = q - (t * v1) * w
        q = x - (t * v2) * w
    row[k1] = p
    row[k1 + 1] = q


@compiled
def reflect_right(A, top, end, lo, hi, V):
    """Rows [top, end) of A times reflectors lo … hi−2, where row i of the window starts at reflector i.

    The last reflector, hi−2, has two elements only (V[hi−2, 2] is not read). Six rows at a time keep the arithmetic units
    busy (14 µs against 17 with four and 30 with two, n = 200); what was computed last enters each sum last.
    """
    last = hi - 2  # three-element reflectors are lo … last−1
    i = top
    while i < end:
        if i + 6 <= end:
            k0 = min(max(lo, i + 5), max(last, lo))
            for r in range(6):
                start = max(lo, i + r)
                if start < k0:
                    _reflect_row_right(A[i + r], start, k0, V)
            if k0 < last:
                r0, r1, r2, r3, r4, r5 = A[i], A[i + 1], A[i + 2], A[i + 3], A[i + 4], A[i + 5]
                p0, p1, p2, p3, p4, p5 = r0[k0], r1[k0], r2[k0], r3[k0], r4[k0], r5[k0]
                k = k0 + 1
                q0, q1, q2, q3, q4, q5 = r0[k], r1[k], r2[k], r3[k], r4[k], r5[k]
                for k in range(k0, last):
                    t, v1, v2 = V[k, 0], V[k, 1], V[k, 2]
                    t1, t2 = t * v1, t * v2
                    j = k + 2
                    x0, x1, x2, x3, x4, x5 = r0[j], r1[j], r2[j], r3[j], r4[j], r5[j]
                    w0 = (v2 * x0 + p0) + v1 * q0
                    w1 = (v2 * x1 + p1) + v1 * q1
                    w2 = (v2 * x2 + p2) + v1 * q2
                    w3 = (v2 * x3 + p3) + v1 * q3
                    w4 = (v2 * x4 + p4) + v1 * q4
                    w5 = (v2 * x5 + p5) + v1 * q5
                    r0[k] = p0 - t * w0
                    r1[k] = p1 - t * w1
                    r2[k] = p2 - t * w2
                    r3[k] = p3 - t * w3
                    r4[k] = p4 - t * w4
                    r5[k] = p5 - t * w5
                    p0 = q0 - t1 * w0
                    p1 = q1 - t1 * w1
                    p2 = q2 - t1 * w2
                    p3 = q3 - t1 * w3
                    p4 = q4 - t1 * w4
                    p5 = q5 - t1 * w5
                    q0 = x0 - t2 * w0
                    q1 = x1 - t2 * w1
                    q2 = x2 - t2 * w2
                    q3 = x3 - t2 * w3
                    q4 = x4 - t2 * w4
                    q5 = x5 - t2 * w5
                r0[last], r0[last + 1] = p0, q0
                r1[last], r1[last + 1] = p1, q1
                r2[last], r2[last + 1] = p2, q2
                r3[last], r3[last + 1] = p3, q3
                r4[last], r4[last + 1] = p4, q4
                r5[last], r5[last + 1] = p5, q5
            i += 6
        else:
            start = max(lo, i)
            if start < last:
                _reflect_row_right(A[i], start, last, V)
            i += 1
    t = V[last, 0]
    v1 = V[last, 1]
    for i in range(top, min(end, last + 1)):
        w = t * (A[i, last] + v1 * A[i, last + 1])
        A[i, last] -= w
        A[i, last + 1] -= w * v1
