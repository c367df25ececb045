"""Measures of structure: symmetry, normality, blocks, grading. Each is O(n³) at most and safe at any magnitude.

Everything here takes plain arrays. Functions named ``*_residual`` are relative: 0 means the structure is exact,
about 1e-16 that it holds to rounding.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal, cast

import numpy as np
import numpy.typing as npt

from schurbench.measures import Array, norm1, power_of_two_exponent

__all__ = [
    "Balancing",
    "Blocks",
    "Departure",
    "Grading",
    "Residuals",
    "balancing",
    "blocks",
    "departure",
    "grading",
    "log2_column_norms",
    "log2_row_norms",
    "residuals",
    "scaled",
    "times_power_of_two",
]

Real = npt.NDArray[np.float64]


def times_power_of_two(a: Array, exponent: int | npt.NDArray[np.int64]) -> Array:
    """2^exponent · a, entry by entry, without overflow of the factor itself; an array of exponents holds one a row."""
    parts = np.ascontiguousarray(a).view(np.float64)
    shift = np.asarray(exponent, dtype=np.int64)
    # ldexp takes a C int; beyond ±2200 every double is 0 or infinite anyway.
    steps = np.clip(shift, -2200, 2200).astype(np.intc)
    with np.errstate(under="ignore", over="ignore"):
        return cast(Array, np.ldexp(parts, steps[:, None] if steps.ndim else steps).view(a.dtype))


def scaled(a: Array) -> tuple[Array, int]:
    """The array brought to a largest part in [1/2, 1) by an exact power of two, and that exponent."""
    exponent = power_of_two_exponent(np.ascontiguousarray(a))
    return times_power_of_two(a, exponent), exponent


def log2_row_norms(a: Array) -> Real:
    """log₂ of the 2-norm of every row, −inf for a zero row; no magnitude over- or underflows."""
    if not a.size:
        return np.zeros(a.shape[0])
    parts = np.ascontiguousarray(a).view(np.float64)
    biggest = np.abs(parts).max(axis=1)
    exponents = -np.frexp(biggest)[1].astype(np.int64)
    level = np.asarray(np.linalg.norm(times_power_of_two(a, exponents), axis=1), dtype=np.float64)
    out = np.full(a.shape[0], -np.inf)
    filled = level > 0.0
    out[filled] = np.log2(level[filled]) - exponents[filled]
    return out


def log2_column_norms(a: Array) -> Real:
    """log₂ of the 2-norm of every column, −inf for a zero column."""
    return log2_row_norms(a.T)


@dataclass(frozen=True, slots=True)
class Residuals:
    """How far a matrix is from five structures, each relative.

    Attributes
    ----------
    symmetric : float
        ‖A − Aᵀ‖ / ‖A‖ (Frobenius, like all of these).
    hermitian : float
        ‖A − Aᴴ‖ / ‖A‖.
    skew : float
        ‖A + Aᴴ‖ / ‖A‖: skew-symmetric, for a complex matrix skew-Hermitian.
    orthogonal : float
        ‖AᴴA − I‖ / √n: orthogonal, for a complex matrix unitary.
    scaled_orthogonal : float
        The same for c·A with c = √n / ‖A‖: a multiple of an orthogonal matrix.
    normal : float
        ‖AAᴴ − AᴴA‖ / ‖A‖².
    """

    symmetric: float
    hermitian: float
    skew: float
    orthogonal: float
    scaled_orthogonal: float
    normal: float


def residuals(a: Array) -> Residuals:
    """Relative residuals of the five structures; a zero matrix has all of them but orthogonality."""
    n = a.shape[0]
    b, exponent = scaled(a)
    size = float(np.linalg.norm(b))
    if size == 0.0:
        return Residuals(0.0, 0.0, 0.0, 1.0, 1.0, 0.0)
    adjoint = b.conj().T
    gram = adjoint @ b
    identity = np.eye(n)
    symmetric = float(np.linalg.norm(b - b.T)) / size
    with np.errstate(over="ignore", under="ignore"):
        # AᴴA = 4^−exponent·gram: infinite for a huge matrix, 0 for a tiny one, and both are right.
        orthogonal = float(np.linalg.norm(times_power_of_two(gram, -2 * exponent) - identity)) / n**0.5
    return Residuals(
        symmetric=symmetric,
        hermitian=symmetric if a.dtype == np.float64 else float(np.linalg.norm(b - adjoint)) / size,
        skew=float(np.linalg.norm(b + adjoint)) / size,
        orthogonal=orthogonal,
        scaled_orthogonal=float(np.linalg.norm(gram * (n / size**2) - identity)) / n**0.5,
        normal=float(np.linalg.norm(b @ adjoint - gram)) / size**2,
    )


@dataclass(frozen=True, slots=True)
class Departure:
    """Henrici's departure from normality over ‖A‖: 0 for a normal matrix, at most 1.

    Attributes
    ----------
    value : float or None
        √(‖A‖² − Σ|λ|²) / ‖A‖ where a Schur form was computed for it (``source`` is ``"schur form"``), otherwise None.
    lower, upper : float
        Bounds from the commutator alone, valid whatever the source.
    source : str
        ``"schur form"`` or ``"bounds"``.
    """

    value: float | None
    lower: float
    upper: float
    source: Literal["schur form", "bounds"]


def departure(a: Array, normal: float, exact: bool) -> Departure:
    """Henrici's departure from normality in the Frobenius norm.

    Parameters
    ----------
    a : (n, n) ndarray
    normal : float
        ‖AAᴴ − AᴴA‖ / ‖A‖², as `residuals` gives it.
    exact : bool
        Whether to compute a Schur form (LAPACK) for the exact value.

    Notes
    -----
    The exact value is the Frobenius norm of the strictly upper part of a Schur form, which loses no digits, where the
    difference ‖A‖² − Σ|λ|² would lose half of them. A standardised real 2×2 block [[a, b], [c, a]] contributes
    (b + c)², because ‖block‖² − 2|λ|² = (b + c)².

    References
    ----------
    P. Henrici, "Bounds for iterates, inverses, spectral variation and fields of values of non-normal matrices",
    Numer. Math. 4 (1962) 24–40: dep² ≤ √((n³−n)/12) · ‖AAᴴ − AᴴA‖.
    L. Elsner and M. H. C. Paardekooper, "On measures of nonnormality of matrices", Linear Algebra Appl. 92 (1987)
    107–124: ‖AAᴴ − AᴴA‖ ≤ √6 · ‖A‖ · dep. Both cited from memory; the tests hold them against exact values.
    """
    n = a.shape[0]
    lower = normal / 6.0**0.5
    upper = min(1.0, ((n**3 - n) / 12.0) ** 0.25 * normal**0.5)
    if not exact:
        return Departure(None, lower, upper, "bounds")
    import scipy.linalg

    b, _ = scaled(a)
    size = float(np.linalg.norm(b))
    if size == 0.0:
        return Departure(0.0, 0.0, 0.0, "schur form")
    t: Any = scipy.linalg.schur(b, output="real" if b.dtype == np.float64 else "complex", check_finite=False)[0]
    off = np.triu(t, 1)
    pairs = np.flatnonzero(np.diagonal(t, -1))
    off[pairs, pairs + 1] += np.diagonal(t, -1)[pairs]
    value = float(np.linalg.norm(off)) / size
    return Departure(min(value, 1.0), lower, upper, "schur form")


@dataclass(frozen=True, slots=True)
class Balancing:
    """What LAPACK's balancing (xGEBAL) would do to the norm.

    Attributes
    ----------
    factor : float
        ‖A‖₁ / ‖D⁻¹AD‖₁, the better of scaling alone and permuting first.
    choice : str
        ``"scale"`` or ``"both"``, whichever gives that factor; ``"both"`` only where it is better.
    log10_range : float
        Decades between the largest and the smallest scale factor.
    """

    factor: float
    choice: Literal["scale", "both"]
    log10_range: float


def balancing(a: Array) -> Balancing:
    """Norm after balancing and the range of its scale factors, without changing the matrix."""
    from scipy.linalg import lapack

    b, _ = scaled(a)
    before = norm1(b)
    if before == 0.0:
        return Balancing(1.0, "scale", 0.0)
    gebal: Any = lapack.dgebal if b.dtype == np.float64 else lapack.zgebal

    def judged(choice: Literal["scale", "both"]) -> Balancing:
        balanced, lo, hi, record, _info = gebal(b, scale=1, permute=int(choice == "both"))
        scale = np.asarray(record)[lo : hi + 1]
        decades = float(np.log10(scale.max()) - np.log10(scale.min()))
        return Balancing(before / norm1(np.asarray(balanced)), choice, decades)

    alone, permuted = judged("scale"), judged("both")
    # Permuting first must earn its place: rounding alone may make the two norms differ in the last digit.
    return permuted if permuted.factor > 1.01 * alone.factor else alone


@dataclass(frozen=True, slots=True)
class Blocks:
    """Blocks that a permutation of the states brings to block-triangular form.

    Attributes
    ----------
    isolated : (int, int)
        Half-open range left after xGEBAL's permutation; rows outside it are already triangular. (0, n) if none is.
    components : int
        Strongly connected components of the graph with an edge i → j where a[i, j] ≠ 0.
    sizes : tuple of int
        Their sizes, largest first.
    """

    isolated: tuple[int, int]
    components: int
    sizes: tuple[int, ...]


def blocks(a: Array) -> Blocks:
    """Permutable blocks of the non-zero pattern; magnitudes play no part."""
    from scipy.linalg import lapack
    from scipy.sparse import csr_array
    from scipy.sparse.csgraph import connected_components

    pattern = (a != 0).astype(np.float64)
    gebal: Any = lapack.dgebal
    _, lo, hi, _, _ = gebal(pattern, scale=0, permute=1)
    count, labels = connected_components(csr_array(pattern), directed=True, connection="strong")
    sizes = np.sort(np.bincount(labels, minlength=count))[::-1]
    return Blocks((int(lo), int(hi) + 1), int(count), tuple(int(s) for s in sizes))


@dataclass(frozen=True, slots=True)
class Grading:
    """Straight line through log₁₀ of the row norms, top to bottom.

    Attributes
    ----------
    slope : float
        Decades a row; negative when the matrix falls off downwards, as QR likes it.
    decades : float
        Slope times n−1: rise of the line from the first row to the last.
    fit : float
        Share of the variation that the line explains, 0 to 1.
    """

    slope: float
    decades: float
    fit: float


def grading(log2_norms: Real) -> Grading:
    """Grading trend from log₂ row norms; zero rows (−inf) are left out."""
    rows = np.flatnonzero(np.isfinite(log2_norms))
    if rows.size < 3:
        return Grading(0.0, 0.0, 0.0)
    x = rows - rows.mean()
    level = log2_norms[rows] * np.log10(2.0)
    y = level - level.mean()
    variation = float(y @ y)
    if variation <= 1e-20 * rows.size:
        return Grading(0.0, 0.0, 0.0)
    slope = float(x @ y) / float(x @ x)
    return Grading(slope, slope * (log2_norms.size - 1), min(1.0, slope * float(x @ y) / variation))
