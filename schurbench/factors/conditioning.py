"""How far rounding moves each eigenvalue: condition numbers 1/s(λ) and separations, from the triangular factor."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import scipy.linalg
from scipy.linalg import lapack

from schurbench.factors.triangular import Array, diagonal_blocks, unfinished_windows
from schurbench.measures import ULP, norm1

__all__ = ["SEPARATION_LIMIT", "condition_numbers", "distances_to_spectrum_at", "separations"]

#: Largest n for which separations are estimated; each costs a reordering of the whole factor.
SEPARATION_LIMIT = 250

#: Inverse iterations for a smallest singular value; one that matters here is far smaller than the next.
_INVERSE_ITERATIONS = 3

Real = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]


def condition_numbers(t: Array, form: str) -> Real:
    """Condition number 1/s(λ) = ‖x‖₂ ‖y‖₂ / |yᴴx| of each eigenvalue, in the order of the rows of `t`.

    Parameters
    ----------
    t : (n, n) ndarray
        Quasi-triangular (``"real"``) or triangular (``"complex"``) factor; unfinished windows are allowed.
    form : str

    Returns
    -------
    (n,) ndarray of float64
        1 at best; ``inf`` where the eigenvectors overflow, which happens only for eigenvalues that are multiple and
        defective to working precision; NaN for rows in unfinished windows.

    Notes
    -----
    s(λ) is LAPACK's (``dtrsna``; Users' Guide, section 4.8; Wilkinson 1965, chapter 2, section 8). The right and left
    eigenvectors of the triangular factor are found for all eigenvalues at once by substitution, scaled so that
    yᴴx = 1: the product of their norms then involves no cancellation. Differences of eigenvalues below rounding level
    are replaced by it, as in LAPACK's ``dtrevc``. For a complex pair both get the larger of
    their two computed values.
    """
    n = t.shape[0]
    if n == 0:
        return np.zeros(0)
    triangular = _triangular(t, form)
    values = np.diagonal(triangular).copy()
    level = np.maximum(ULP * np.abs(values), np.finfo(np.float64).tiny / ULP)

    def gaps(row: int, columns: slice) -> Complex:
        gap = values[row] - values[columns]
        floor = level[columns]
        return np.where(np.abs(gap) < floor, floor.astype(np.complex128), gap)

    # Overflow marks a condition number beyond measure and becomes inf below.
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        x = np.eye(n, dtype=np.complex128)
        for i in range(n - 2, -1, -1):
            x[i, i + 1 :] = -(triangular[i, i + 1 :] @ x[i + 1 :, i + 1 :]) / gaps(i, slice(i + 1, n))
        right = _column_norms(x)
        x = np.eye(n, dtype=np.complex128)
        for j in range(1, n):
            x[:j, j] = -(x[:j, :j] @ triangular[:j, j]) / gaps(j, slice(0, j))
        left = _column_norms(x.T)
        condition = right * left
    condition[~np.isfinite(condition)] = np.inf
    return _per_row(condition, t, form, np.maximum)


def separations(t: Array, form: str) -> tuple[Real, str]:
    """Separation of each eigenvalue from the rest of the spectrum, as LAPACK's ``ztrsen`` estimates it.

    Parameters
    ----------
    t : (n, n) ndarray
    form : str

    Returns
    -------
    sep : (n,) ndarray of float64
        In the units of `t`; NaN where it was not computed.
    reason : str
        Why values are missing; empty when none is.

    Notes
    -----
    sep(λ, T₂₂) is the smallest singular value of T₂₂ − λI once λ is moved to the top; ``ztrsen`` estimates it from
    1-norms, to within a factor of n. The eigenvector moves by about ‖E‖/sep under a perturbation E (Stewart 1973).
    """
    n = t.shape[0]
    if n > SEPARATION_LIMIT:
        return np.full(n, np.nan), f"not estimated for n > {SEPARATION_LIMIT}: each one reorders the whole factor"
    if n < 2:
        return np.full(n, np.nan), "there is no other eigenvalue to be separate from"
    scale = norm1(t)
    if scale == 0.0:
        return np.zeros(n), ""
    triangular = np.asfortranarray(_triangular(t, form) / scale)
    sep = np.empty(n)
    workspace = 2 * (n - 1)
    for row in range(n):
        select = np.zeros(n, dtype=np.int32)
        select[row] = 1
        result = lapack.ztrsen(select, triangular, triangular, job=b"V", wantq=0, lwork=workspace)
        sep[row] = result[5] if result[-1] == 0 else np.nan
    sep = _per_row(sep * scale, t, form, np.minimum)
    return sep, "" if not np.isnan(sep).any() else "rows in unfinished windows have no eigenvalue yet"


def distances_to_spectrum_at(points: Complex, t: Array, form: str) -> Real:
    """Size of the smallest perturbation that puts an eigenvalue exactly at each point: σ_min(T − zI), estimated.

    Parameters
    ----------
    points : (m,) ndarray of complex128
    t : (n, n) ndarray
        With entries of about unit size.
    form : str

    Returns
    -------
    (m,) ndarray of float64
        In the units of `t`; never too small by more than rounding, and usually right to a digit.

    Notes
    -----
    Unlike a condition number this holds for clusters and defective eigenvalues too (Trefethen & Embree, Spectra and
    Pseudospectra, 2005, section 2, equation 2.4). Inverse iteration with (T − zI)ᴴ(T − zI) on the triangular factor
    (section 39 there), from a fixed start.
    """
    triangular = np.asfortranarray(_triangular(t, form))
    n = triangular.shape[0]
    values = np.diagonal(triangular).copy()
    floor = max(ULP * ULP * norm1(triangular), np.finfo(np.float64).tiny / ULP)
    start = np.exp(1j * np.arange(n, dtype=np.float64) ** 2) / np.sqrt(n)
    distances = np.empty(points.size)
    for place, point in enumerate(points):
        shifted = values - point
        triangular[np.diag_indices(n)] = np.where(np.abs(shifted) < floor, floor, shifted)
        vector, size = start, np.inf
        with np.errstate(over="ignore", invalid="ignore"):
            for _ in range(_INVERSE_ITERATIONS):
                inner = lapack.ztrtrs(triangular, vector, trans=2)[0]
                outer = lapack.ztrtrs(triangular, inner)[0]
                size = float(np.linalg.norm(outer))
                if not 0.0 < size < np.inf:
                    break
                vector = outer / size
        distances[place] = 1.0 / np.sqrt(size) if 0.0 < size < np.inf else 0.0
    return distances


def _triangular(t: Array, form: str) -> Complex:
    """A complex triangular matrix unitarily similar to `t`, with the rows of its finished blocks in place."""
    unfinished = unfinished_windows(t, form)
    if unfinished:
        t = t.copy()
    for lo, hi in unfinished:
        # Finished eigenvalues depend on the whole matrix, so a window still being worked on is solved privately here.
        rows = slice(lo, hi)
        block, u = scipy.linalg.schur(t[rows, rows], output="real" if form == "real" else "complex")
        t[:lo, rows] = t[:lo, rows] @ u
        t[rows, hi:] = u.conj().T @ t[rows, hi:]
        t[rows, rows] = block
    if not np.iscomplexobj(t):
        unitary = np.eye(t.shape[0], dtype=np.complex128)
        return np.asarray(scipy.linalg.rsf2csf(t, unitary)[0], dtype=np.complex128)
    return np.asarray(t, dtype=np.complex128)


def _column_norms(x: Complex) -> Real:
    """Euclidean norm of every column without overflow of the squares."""
    largest = np.abs(x).max(axis=0)
    safe = np.where((largest > 0) & np.isfinite(largest), largest, 1.0)
    return np.asarray(np.linalg.norm(x / safe, axis=0) * safe, dtype=np.float64)


def _per_row(values: Real, t: Array, form: str, of_pair: np.ufunc) -> Real:
    """One value for both members of a pair, NaN in unfinished windows."""
    out = values.copy()
    for lo, hi in diagonal_blocks(t):
        if hi - lo == 2 and form == "real":
            out[lo:hi] = of_pair(values[lo], values[lo + 1])
    for lo, hi in unfinished_windows(t, form):
        out[lo:hi] = np.nan
    return out
