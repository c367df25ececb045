"""The ratios by which factors and states are judged, and the one place that names their limit.

Both ratios are those of LAPACK's own test programs (Reference-LAPACK, TESTING/EIG: ``dget01``-style residuals in
``dchkhs.f`` and ``ddrves.f``): residual 1-norm over n·ulp times the norm, with ulp = 2⁻⁵² (``dlamch('P')``).
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

__all__ = ["RATIO_LIMIT", "ULP", "frobenius", "norm1", "orthogonality_ratio", "power_of_two_exponent", "residual_ratio"]

#: Unit in the last place of 1.0 in double precision, LAPACK's ``ulp``.
ULP = 2.0**-52

#: Largest acceptable ratio, the threshold of LAPACK's acceptance tests (``dec.in``, ``ded.in``: 20.0).
RATIO_LIMIT = 20.0

#: Smallest positive double; the rounding unit cannot fall below it, however small the matrix.
_TINIEST = 2.0**-1074

#: float64 or complex128. Not written as their union, because numpy's type stubs widen it at every operation.
Array = npt.NDArray[Any]


def norm1(a: Array) -> float:
    """Largest absolute column sum; 0 for an empty array."""
    return float(np.abs(a).sum(axis=0).max()) if a.size else 0.0


def frobenius(a: Array) -> float:
    """Frobenius norm of an array in working units (largest entry at most 2^450, so squares cannot overflow).

    Summed without BLAS: a threaded dot product costs milliseconds of waking up and its last bit depends on the threads.
    """
    return float(np.sqrt(np.square(np.ascontiguousarray(a).view(np.float64)).sum()))


def power_of_two_exponent(a: Array) -> int:
    """Exponent e for which the largest real or imaginary part of 2^e·a lies in [1/2, 1); 0 for a zero array."""
    biggest = float(np.abs(a.view(np.float64)).max()) if a.size else 0.0
    return -int(np.frexp(biggest)[1]) if biggest > 0.0 else 0


def residual_ratio(a: Array, z: Array, t: Array) -> float:
    """Backward error ‖A − Z T Zᴴ‖₁ / (‖A‖₁ n ulp).

    Parameters
    ----------
    a, z, t : (n, n) arrays
        Matrix, unitary factor, (quasi-)triangular or Hessenberg factor, in the same units.

    Notes
    -----
    Evaluated after scaling by a power of two, so that no product over- or underflows. For a matrix so small that
    ulp·‖A‖ is less than the smallest positive double, that double takes its place. A zero matrix is measured against 1.
    """
    n = a.shape[0]
    if n == 0:
        return 0.0
    e = power_of_two_exponent(np.ascontiguousarray(a))
    sa, st = _ldexp(a, e), _ldexp(t, e)
    residual = norm1(sa - z @ st @ z.conj().T)
    unit = ULP * norm1(sa)
    if unit == 0.0:
        unit = ULP
    elif e > 0:
        unit = max(unit, float(np.ldexp(_TINIEST, min(e, 2000))))
    return float(residual / (n * unit))


def orthogonality_ratio(z: Array) -> float:
    """Departure from unitary ‖I − Zᴴ Z‖₁ / (n ulp)."""
    n = z.shape[0]
    if n == 0:
        return 0.0
    return float(norm1(z.conj().T @ z - np.eye(n)) / (n * ULP))


def _ldexp(a: Array, e: int) -> Array:
    """2^e·a without overflow of the factor itself (|e| may exceed 1023)."""
    if e == 0:
        return a
    half = e // 2
    return (a * 2.0**half) * 2.0 ** (e - half)
