"""What happens at the edge of the window: negligible entries found, 2×2 blocks standardised, diagonals copied out."""

from __future__ import annotations

import math

from schurbench.kernels._jit import compiled

__all__ = [
    "copy_bands",
    "copy_bands_complex",
    "deflation_threshold",
    "scan_up",
    "scan_up_complex",
    "standardise_pair",
]

ULP = 2.0**-52
TINY = 2.0**-1022 / ULP  # below this an entry has lost digits to underflow and carries no information


@compiled
def deflation_threshold(a, d, low, up, before, after, test, tol, norm):
    """Largest |h[k, k−1]| that a deflation test accepts.

    Neighbour: Wilkinson's |h| ≤ ulp (|h₁₁| + |h₂₂|) (Golub & Van Loan, 4th ed., §7.5.1). Ahues–Tisseur: additionally
    |h₂₁||h₁₂| ≤ ulp |h₂₂||h₁₁ − h₂₂|, both scaled (Ahues & Tisseur, LAPACK Working Note 122, 1997). Norm: |h| ≤ ulp ‖H‖_F.

    Parameters
    ----------
    a, d : float or complex
        Diagonal entries h[k−1, k−1] and h[k, k].
    low, up : float
        |h[k, k−1]| and |h[k−1, k]|.
    before, after : float
        |h[k−1, k−2]| and |h[k+1, k]|, 0 where they do not exist.
    test : int
        0 neighbour, 1 ahues-tisseur, 2 norm.
    tol : float
        Absolute level that replaces rounding level; negative for the default.
    norm : float
        Frobenius norm of H.
    """
    if test == 2:
        return tol if tol >= 0.0 else max(TINY, ULP * norm)
    size = abs(a) + abs(d)
    hollow = size == 0.0
    if hollow:
        # both neighbours vanish: judge by the next subdiagonal entries, then by the norm
        size = before + after
        if size == 0.0:
            size = norm
    first = tol if tol >= 0.0 else max(TINY, ULP * size)
    if test == 0:
        return first
    if hollow:
        # the block has the eigenvalues ±sqrt(|h₂₁||h₁₂|), which must be rounding of the neighbours to be dropped
        return min(first, max(TINY, first * (first / up))) if up > 0.0 else first
    eps = first / size if size > 0.0 else ULP
    gap = abs(a - d)
    big, small = max(low, up), min(low, up)
    wide, narrow = max(abs(d), gap), min(abs(d), gap)
    total = wide + big
    if total == 0.0 or up == 0.0:
        return first
    allowed = max(TINY, eps * (narrow * (wide / total)))
    # accepted when small·(big/total) ≤ allowed; solved for |h[k, k−1]| so that magnitude and threshold can be shown
    second = allowed * (total / up)
    if small * (big / total) <= allowed:
        return max(min(first, second), min(first, low))
    return min(first, second)


@compiled
def scan_up(H, lo, hi, test, tol, norm):
    """Row of the lowest negligible subdiagonal entry in [lo, hi), looking upward; parameters as above.

    Returns
    -------
    row, magnitude, threshold : int, float, float
        ``row = lo`` when no entry h[k, k−1] with lo < k < hi is negligible.
    """
    n = H.shape[0]
    for k in range(hi - 1, lo, -1):
        low = abs(H[k, k - 1])
        before = abs(H[k - 1, k - 2]) if k >= 2 else 0.0
        after = abs(H[k + 1, k]) if k + 1 < n else 0.0
        threshold = deflation_threshold(H[k - 1, k - 1], H[k, k], low, abs(H[k - 1, k]), before, after, test, tol, norm)
        if low <= threshold:
            return k, low, threshold
    return lo, 0.0, 0.0


@compiled
def scan_up_complex(H, lo, hi, test, tol, norm):
    """The same for a complex H in planes, shape (2, n, n)."""
    R, I = H[0], H[1]
    n = R.shape[0]
    for k in range(hi - 1, lo, -1):
        low = math.hypot(R[k, k - 1], I[k, k - 1])
        before = math.hypot(R[k - 1, k - 2], I[k - 1, k - 2]) if k >= 2 else 0.0
        after = math.hypot(R[k + 1, k], I[k + 1, k]) if k + 1 < n else 0.0
        threshold = deflation_threshold(
            complex(R[k - 1, k - 1], I[k - 1, k - 1]),
            complex(R[k, k], I[k, k]),
            low,
            math.hypot(R[k - 1, k], I[k - 1, k]),
            before,
            after,
            test,
            tol,
            norm,
        )
        if low <= threshold:
            return k, low, threshold
    return lo, 0.0, 0.0


@compiled
def standardise_pair(H, Qh, i):
    """Bring the 2×2 block at rows i, i+1 to standard form by a rotation applied to all of H and Zᴴ.

    Standard form: upper triangular when the eigenvalues are real; otherwise equal diagonal entries and off-diagonal
    entries of opposite sign (Bai & Demmel, On swapping diagonal blocks in real Schur form, LAA 186, 1993, §2).

    Returns
    -------
    re1, im1, re2, im2 : float
        The eigenvalues.
    """
    n = H.shape[0]
    a, b, c, d = H[i, i], H[i, i + 1], H[i + 1, i], H[i + 1, i + 1]
    cs, sn = 1.0, 0.0
    if c == 0.0:
        pass
    elif b == 0.0:  # lower triangular: exchange the two rows and columns
        cs, sn = 0.0, 1.0
        a, b, c, d = d, -c, 0.0, a
    elif a == d and (b < 0.0) != (c < 0.0):
        pass
    else:
        p = 0.5 * (a - d)
        big = max(abs(b), abs(c))
        mixed = min(abs(b), abs(c)) * math.copysign(1.0, b) * math.copysign(1.0, c)
        scale = max(abs(p), big)
        disc = p / scale * p + big / scale * mixed  # ((a−d)/2)² + bc, over scale
        if disc >= 4.0 * ULP * scale:
            # clearly real eigenvalues: the row (c, z) of the rotation makes the block triangular
            z = p + math.copysign(math.sqrt(scale) * math.sqrt(disc), p)
            r = math.hypot(c, z)
            cs, sn = z / r, c / r
            a, d = d + z, d - big / z * mixed
            b, c = b - c, 0.0
        else:
            # complex or nearly equal eigenvalues: make the diagonal entries equal first
            both = b + c
            spread = a - d
            r = math.hypot(both, spread)
            cs = math.sqrt(0.5 * (1.0 + abs(both) / r))
            sn = -(p / (r * cs)) * math.copysign(1.0, both)
            a1, b1 = a * cs + b * sn, -a * sn + b * cs
            c1, d1 = c * cs + d * sn, -c * sn + d * cs
            a, b = a1 * cs + c1 * sn, b1 * cs + d1 * sn
            c, d = -a1 * sn + c1 * cs, -b1 * sn + d1 * cs
            a = d = 0.5 * (a + d)
            if c != 0.0:
                if b == 0.0:
                    b, c = -c, 0.0
                    cs, sn = -sn, cs
                elif (b < 0.0) == (c < 0.0):
                    # real after all: one more rotation makes the block triangular
                    rb, rc = math.sqrt(abs(b)), math.sqrt(abs(c))
                    p = math.copysign(rb * rc, c)
                    w = 1.0 / math.sqrt(abs(b + c))
                    a, d = a + p, d - p
                    b, c = b - c, 0.0
                    cs1, sn1 = rb * w, rc * w
                    cs, sn = cs * cs1 - sn * sn1, cs * sn1 + sn * cs1
    H[i, i], H[i, i + 1], H[i + 1, i], H[i + 1, i + 1] = a, b, c, d
    if sn != 0.0:
        for j in range(i + 2, n):
            x, y = H[i, j], H[i + 1, j]
            H[i, j] = cs * x + sn * y
            H[i + 1, j] = cs * y - sn * x
        for j in range(i):
            x, y = H[j, i], H[j, i + 1]
            H[j, i] = cs * x + sn * y
            H[j, i + 1] = cs * y - sn * x
        if Qh.shape[0] > 0:
            for j in range(n):
                x, y = Qh[i, j], Qh[i + 1, j]
                Qh[i, j] = cs * x + sn * y
                Qh[i + 1, j] = cs * y - sn * x
    if c == 0.0:
        return a, 0.0, d, 0.0
    im = math.sqrt(abs(b)) * math.sqrt(abs(c))
    return a, im, d, -im


@compiled
def copy_bands(H, lo, hi, out):
    """Copy diagonal, subdiagonal and superdiagonal of rows lo … hi−1 of H into rows 0, 1, 2 of ``out`` (3, n).

    Column i of ``out`` gets h[i, i], h[i+1, i] and h[i, i+1]; the last column of all ends with zeros.
    """
    n = H.shape[0]
    for i in range(lo, min(hi, n - 1)):
        out[0, i] = H[i, i]
        out[1, i] = H[i + 1, i]
        out[2, i] = H[i, i + 1]
    if hi == n:
        out[0, n - 1] = H[n - 1, n - 1]
        out[1, n - 1] = 0.0
        out[2, n - 1] = 0.0


@compiled
def copy_bands_complex(H, lo, hi, out):
    """The same for a complex H in planes; ``out`` is complex, (3, n)."""
    R, I = H[0], H[1]
    n = R.shape[0]
    for i in range(lo, min(hi, n - 1)):
        out[0, i] = complex(R[i, i], I[i, i])
        out[1, i] = complex(R[i + 1, i], I[i + 1, i])
        out[2, i] = complex(R[i, i + 1], I[i, i + 1])
    if hi == n:
        out[0, n - 1] = complex(R[n - 1, n - 1], I[n - 1, n - 1])
        out[1, n - 1] = 0.0
        out[2, n - 1] = 0.0
