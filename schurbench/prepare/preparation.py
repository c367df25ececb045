"""From the loaded matrix to the Hessenberg matrix the iteration starts from. LAPACK does the work, through scipy."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Any, cast

import numpy as np
import numpy.typing as npt

from schurbench.errors import SettingsError
from schurbench.intake import WorkingMatrix
from schurbench.measures import Array, power_of_two_exponent

__all__ = ["BALANCE_CHOICES", "Preparation", "prepare", "single_blas_thread"]

BALANCE_CHOICES = ("none", "permute", "scale", "both")

# Outside 2^±450 the squares and products inside a sweep could over- or underflow. LAPACK's xGEES scales at about the
# same place: sqrt(safe minimum)/ulp = 2⁻⁴⁵⁹.
_LARGEST_EXPONENT = 450


@dataclass(frozen=True, slots=True, eq=False)
class Preparation:
    """Hessenberg start of a run, with 2^exponent · D⁻¹ A D = Z H Zᴴ.

    Attributes
    ----------
    H : (n, n) ndarray, row-major, write-protected
        Upper Hessenberg with exact zeros below the subdiagonal; float64 or complex128 by form.
    Qh : (n, n) ndarray, row-major, write-protected; no rows when Z was not asked for
        Zᴴ, which is what the iteration works on.
    D : (n,) ndarray of float64
        Powers of two; all ones without scaling.
    exponent : int
        0 unless the matrix was extremely large or small.
    form : str
        ``"real"`` or ``"complex"``.
    flip : bool
        Whether rows and columns were reversed first.
    permutation : (n,) ndarray of int64
        Position j of the permuted matrix holds state ``permutation[j]``; includes the flip.
    isolated : (int, int)
        Half-open range that still needs iteration after permuting (LAPACK ``gebal``: ilo, ihi); rows outside it are
        triangular already.
    """

    H: Array
    Qh: Array
    D: npt.NDArray[np.float64]
    exponent: int
    form: str
    flip: bool
    permutation: npt.NDArray[np.int64]
    isolated: tuple[int, int]

    @property
    def Z(self) -> Array | None:
        """Z, shape (n, n), or None when it was not asked for."""
        return np.ascontiguousarray(self.Qh.conj().T) if len(self.Qh) else None

    def working(self, matrix: WorkingMatrix) -> Array:
        """The matrix that is iterated on, 2^exponent · D⁻¹ A D, shape (n, n)."""
        return np.ascontiguousarray(_ldexp(matrix.array, self.exponent) / self.D[:, None] * self.D)


def prepare(
    matrix: WorkingMatrix,
    form: str = "real",
    balance: str = "permute",
    flip: bool = False,
    accumulate: bool = True,
) -> Preparation:
    """Scale by a power of two if extreme, flip, balance, and reduce to Hessenberg form.

    Parameters
    ----------
    matrix : WorkingMatrix
    form : {"real", "complex"}
    balance : {"none", "permute", "scale", "both"}
        Passed on to LAPACK ``gebal``: permute to expose isolated eigenvalues, scale rows and columns by powers of two.
    flip : bool
        Reverse the order of rows and columns first, for matrices graded upward.
    accumulate : bool
        Whether Z is formed.

    Raises
    ------
    SettingsError
        Unknown balance or form, or a real form of a complex matrix.

    Notes
    -----
    Runs LAPACK with one BLAS thread, so that the Hessenberg start does not depend on the number of cores.
    """
    if balance not in BALANCE_CHOICES:
        raise SettingsError(f"balance {balance!r} is unknown; choose one of {', '.join(BALANCE_CHOICES)}")
    if form == "real" and not matrix.is_real:
        raise SettingsError("a complex matrix has no real Schur form; use form='complex' or form='auto'")
    n = matrix.n
    a: Array = matrix.array
    exponent = _working_exponent(a)
    if exponent:
        a = _ldexp(a, exponent)
    if flip:
        a = a[::-1, ::-1]
    start = np.arange(n - 1, -1, -1) if flip else np.arange(n)
    with single_blas_thread():
        balanced, lo, hi, pivots = _gebal(a, permute=balance in ("permute", "both"), scale=balance in ("scale", "both"))
        permutation = start[_order_of_swaps(pivots, lo, hi, n)] if balance in ("permute", "both") else start
        D = np.ones(n)
        if balance in ("scale", "both"):
            D[permutation[lo:hi]] = pivots[lo:hi]
        H, Qh = _gehrd(balanced, lo, hi, accumulate)
    if accumulate and not np.array_equal(permutation, np.arange(n)):
        placed = np.empty_like(Qh)
        placed[:, permutation] = Qh
        Qh = placed
    if form == "complex":
        H, Qh = H.astype(np.complex128, copy=False), Qh.astype(np.complex128, copy=False)
    for array in (H, Qh, D, permutation):
        array.setflags(write=False)
    return Preparation(H, Qh, D, exponent, form, flip, permutation, (lo, hi))


def _ldexp(a: Array, exponent: int) -> Array:
    """2^exponent · a, in two factors because 2^exponent itself may overflow."""
    half = exponent // 2
    return (a * 2.0**half) * 2.0 ** (exponent - half)


def _working_exponent(a: Array) -> int:
    exponent = power_of_two_exponent(a)
    return exponent if abs(exponent) > _LARGEST_EXPONENT else 0


def _lapack(name: str, a: Array) -> Any:
    """LAPACK routine by its name without the type letter, for the type of a."""
    from scipy.linalg import get_lapack_funcs

    (routine,) = cast("list[Any]", get_lapack_funcs((name,), (a,)))
    return routine


def _gebal(a: Array, *, permute: bool, scale: bool) -> tuple[Array, int, int, npt.NDArray[np.float64]]:
    """LAPACK gebal; returns the balanced matrix, the half-open active range, and its record of swaps and scales."""
    n = a.shape[0]
    if not (permute or scale):
        return a, 0, n, np.ones(n)
    balanced, lo, hi, pivots, info = _lapack("gebal", a)(a, scale=scale, permute=permute)
    if info != 0:
        raise SettingsError(f"LAPACK gebal refused the matrix (info = {info}); try balance='none'")
    return balanced, int(lo), int(hi) + 1, pivots


def _order_of_swaps(pivots: npt.NDArray[np.float64], lo: int, hi: int, n: int) -> npt.NDArray[np.int64]:
    """Replay gebal's swaps (last row upward, then first row downward) on 0 … n−1."""
    order = np.arange(n)
    for j in [*range(n - 1, hi - 1, -1), *range(lo)]:
        k = int(pivots[j]) - 1  # LAPACK counts rows from 1, and scipy passes that on
        order[[j, k]] = order[[k, j]]
    return order


def _gehrd(a: Array, lo: int, hi: int, accumulate: bool) -> tuple[Array, Array]:
    """LAPACK gehrd and orghr; returns H and Qᴴ, both row-major, the latter without rows unless it is wanted."""
    n = a.shape[0]
    if n < 3:
        return np.array(a, order="C"), np.eye(n if accumulate else 0, n, dtype=a.dtype)
    lwork = max(n, int(_lapack("gehrd_lwork", a)(n, lo=lo, hi=hi - 1)[0].real))
    packed, tau, _ = _lapack("gehrd", a)(a, lo=lo, hi=hi - 1, lwork=lwork)
    H = np.triu(np.ascontiguousarray(packed), -1)
    if not accumulate:
        return H, np.empty((0, n), dtype=a.dtype)
    name = "orghr" if a.dtype == np.float64 else "unghr"
    lwork = max(n, int(_lapack(f"{name}_lwork", a)(n, lo=lo, hi=hi - 1)[0].real))
    Q, _ = _lapack(name, a)(packed, tau, lo=lo, hi=hi - 1, lwork=lwork, overwrite_a=1)
    Qh = Q.T  # LAPACK's column-major Q is row-major Qᵀ as it stands
    return H, np.conjugate(Qh, out=Qh) if np.iscomplexobj(Qh) else Qh


@cache
def _threadpools() -> Any:
    import scipy.linalg  # noqa: F401  # its BLAS must be loaded before the pools are listed
    from threadpoolctl import ThreadpoolController

    return ThreadpoolController()


def single_blas_thread() -> Any:
    """Context in which numpy's and scipy's BLAS use one thread each."""
    return _threadpools().limit(limits=1, user_api="blas")
