"""Pairing two lists of eigenvalues that come in different orders."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.optimize import linear_sum_assignment

__all__ = ["pair_spectra"]


def pair_spectra(first: npt.ArrayLike, second: npt.ArrayLike) -> tuple[npt.NDArray[np.intp], npt.NDArray[np.float64]]:
    """One-to-one pairing of two spectra with the smallest sum of distances.

    Parameters
    ----------
    first, second : (n,) array_like of complex
        Finite eigenvalues in the same units.

    Returns
    -------
    order : (n,) ndarray of int
        ``second[order[i]]`` is the partner of ``first[i]``.
    distance : (n,) ndarray of float64
        ``|first[i] - second[order[i]]|``.

    Raises
    ------
    ValueError
        When the lengths differ or a value is not finite.

    Notes
    -----
    Sorting by real part pairs wrongly as soon as rounding swaps two nearly equal real parts; the assignment does not.
    """
    a = np.asarray(first, dtype=np.complex128).ravel()
    b = np.asarray(second, dtype=np.complex128).ravel()
    if a.shape != b.shape:
        raise ValueError(f"{a.size} eigenvalues cannot be paired with {b.size}")
    if not (np.isfinite(a).all() and np.isfinite(b).all()):
        raise ValueError("only finite eigenvalues can be paired")
    if a.size == 0:
        return np.zeros(0, dtype=np.intp), np.zeros(0)
    distance = np.abs(a[:, None] - b[None, :])
    _, order = linear_sum_assignment(distance)
    return np.asarray(order, dtype=np.intp), distance[np.arange(a.size), order]
