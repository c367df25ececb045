"""What kind of matrix is this: the profile, before anything is iterated."""

from __future__ import annotations

import math
from dataclasses import dataclass, fields
from typing import Any

import numpy as np

from schurbench.intake.matrix import WorkingMatrix
from schurbench.measures import ULP, norm1
from schurbench.prepare import structure
from schurbench.prepare.estimate import Estimate, estimate
from schurbench.prepare.plain import number, plain, plural, ten_to
from schurbench.prepare.preparation import single_blas_thread

__all__ = ["EXACT_DEPARTURE_ORDER", "Profile", "profile", "profile_of", "rounding_level"]

#: Largest order at which the departure from normality is computed from a Schur form; above it only bounds are
#: given, because the form would cost as much as the run that the profile precedes.
EXACT_DEPARTURE_ORDER = 256

#: Balancing is worth a remark from this factor in the norm: Gaussian matrices gain less than 1.5.
BALANCE_REMARK = 10.0

#: Spread of row or column norms, in decades, from which it is worth a remark.
SPREAD_REMARK = 3.0

#: Decades along a line through the log row norms from which a matrix counts as graded, and the share of the
#: variation the line has to explain.
GRADING_REMARK = 4.0
GRADING_FIT = 0.5


def rounding_level(n: int) -> float:
    """Residual up to which a structure of order n counts as exact to rounding: 10·√n·ε, with ε = 2⁻⁵³.

    Forming a Gram matrix or a similarity leaves about √n·ε (random-walk growth of rounding); 10 leaves room for that
    and is still far below any residual that means something.
    """
    return 5.0 * math.sqrt(max(1, n)) * ULP


@dataclass(frozen=True, slots=True)
class Profile:
    """What kind of matrix it is. All residuals are relative; norms are in the units of the matrix.

    Attributes
    ----------
    name, sha256 : str
        From the working matrix.
    n : int
        Order.
    dtype : str
        ``"float64"`` or ``"complex128"``.
    real : bool
    norm_one, norm_inf, norm_frobenius, norm_max : float
        Largest column sum, largest row sum, root of the sum of squares, largest entry, of absolute values. Infinite
        where the norm itself leaves the range of double precision.
    symmetric, hermitian, skew, orthogonal, scaled_orthogonal, normal : float
        Residuals, see `schurbench.prepare.structure.Residuals`.
    departure : float or None
        Henrici's departure from normality over ‖A‖, between 0 and 1; None above order `EXACT_DEPARTURE_ORDER`, where
        only the bounds are affordable.
    departure_lower, departure_upper : float
        Bounds on it from ‖AAᴴ − AᴴA‖.
    departure_source : str
        ``"schur form"`` when `departure` is given, ``"bounds"`` when only bounds are.
    balance_factor : float
        Factor by which LAPACK's balancing shrinks the 1-norm.
    balance_choice : str
        Value of the setting ``balance`` that gives this factor, ``"scale"`` or ``"both"``.
    balance_decades : float
        Decades between the largest and the smallest scale factor.
    row_norm_decades, column_norm_decades : float
        Decades between the largest and the smallest non-zero row and column norm.
    zero_rows, zero_columns : int
    isolated : (int, int)
        Half-open range left after permuting isolated eigenvalues out; (0, n) when there are none.
    components : int
        Strongly connected components of the non-zero pattern.
    component_sizes : tuple of int
        Largest first.
    grading_slope, grading_decades, grading_fit : float
        See `schurbench.prepare.structure.Grading`.
    subnormal : int
        Real or imaginary parts that are subnormal numbers.
    zeros : int
        Entries that are exactly 0.
    density : float
        Share of entries that are not.
    lower_bandwidth, upper_bandwidth : int
    hessenberg : bool
        Upper Hessenberg already.
    triangular : str
        ``"diagonal"``, ``"upper"``, ``"lower"`` or ``"no"``.
    seconds_estimate, memory_estimate : float, int
        Wall time (s) and peak memory (bytes) of a run with the default settings, see `schurbench.prepare.estimate`.
    remarks : tuple of str
        What stands out, the most useful first.
    """

    name: str
    sha256: str
    n: int
    dtype: str
    real: bool
    norm_one: float
    norm_inf: float
    norm_frobenius: float
    norm_max: float
    symmetric: float
    hermitian: float
    skew: float
    orthogonal: float
    scaled_orthogonal: float
    normal: float
    departure: float | None
    departure_lower: float
    departure_upper: float
    departure_source: str
    balance_factor: float
    balance_choice: str
    balance_decades: float
    row_norm_decades: float
    column_norm_decades: float
    zero_rows: int
    zero_columns: int
    isolated: tuple[int, int]
    components: int
    component_sizes: tuple[int, ...]
    grading_slope: float
    grading_decades: float
    grading_fit: float
    subnormal: int
    zeros: int
    density: float
    lower_bandwidth: int
    upper_bandwidth: int
    hessenberg: bool
    triangular: str
    seconds_estimate: float
    memory_estimate: int
    remarks: tuple[str, ...]

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready dictionary with these fields by name; infinities become the string ``"inf"``."""
        return {field.name: plain(getattr(self, field.name)) for field in fields(self)}

    @property
    def structures(self) -> tuple[str, ...]:
        """Structures that hold to rounding, the most useful first, e.g. ``("symmetric", "normal")``."""
        if self.norm_max == 0.0:
            return ("zero",)
        level = rounding_level(self.n)
        found: list[str] = []
        if self.triangular != "no":
            found.append("diagonal" if self.triangular == "diagonal" else f"{self.triangular} triangular")
        names = (
            ("hermitian", "symmetric" if self.real else "Hermitian"),
            ("skew", "skew-symmetric" if self.real else "skew-Hermitian"),
            ("orthogonal", "orthogonal" if self.real else "unitary"),
            ("scaled_orthogonal", f"a multiple of {'an orthogonal' if self.real else 'a unitary'} matrix"),
            ("normal", "normal"),
        )
        for field, word in names:
            if getattr(self, field) <= level and not (field == "scaled_orthogonal" and self.orthogonal <= level):
                found.append(word)
        if not self.real and self.symmetric <= level < self.hermitian:
            found.append("complex symmetric")
        return tuple(found)


def profile(matrix: Any) -> Profile:
    """Say what kind of matrix it is, before running anything on it.

    Parameters
    ----------
    matrix : WorkingMatrix or anything `schurbench.load` accepts

    Returns
    -------
    Profile

    Raises
    ------
    schurbench.errors.InputError
        If the matrix cannot be loaded.
    """
    if not isinstance(matrix, WorkingMatrix):
        from schurbench.intake import load

        matrix = load(matrix)
    return profile_of(matrix, exact_departure=matrix.n <= EXACT_DEPARTURE_ORDER)


def profile_of(matrix: WorkingMatrix, *, exact_departure: bool) -> Profile:
    """`profile` with a say on whether the departure from normality may cost a Schur form.

    Runs with one BLAS thread, as preparation does: the same numbers on every machine, and no collapse on a busy one.
    """
    with single_blas_thread():
        return _profile_of(matrix, exact_departure)


def _profile_of(matrix: WorkingMatrix, exact_departure: bool) -> Profile:
    import scipy.linalg

    a = matrix.array
    n = matrix.n
    b, exponent = structure.scaled(a)
    with np.errstate(over="ignore"):
        norms = [
            float(np.ldexp(value, -exponent))
            for value in (norm1(b), norm1(b.T), float(np.linalg.norm(b)), float(np.abs(b).max()))
        ]
    rows, columns = structure.log2_row_norms(a), structure.log2_column_norms(a)
    residual = structure.residuals(a)
    henrici = structure.departure(a, residual.normal, exact_departure)
    balance = structure.balancing(a)
    block = structure.blocks(a)
    trend = structure.grading(rows)
    parts = np.abs(a.view(np.float64))
    subnormal = int(np.count_nonzero((parts > 0.0) & (parts < np.finfo(np.float64).tiny)))
    zeros = int(n * n - np.count_nonzero(a))
    lower, upper = (int(w) for w in scipy.linalg.bandwidth(a))
    cost = estimate(n, real=matrix.is_real)
    triangular = "diagonal" if lower == upper == 0 else "upper" if lower == 0 else "lower" if upper == 0 else "no"
    values: dict[str, Any] = {
        "name": matrix.name,
        "sha256": matrix.sha256,
        "n": n,
        "dtype": a.dtype.name,
        "real": matrix.is_real,
        "norm_one": norms[0],
        "norm_inf": norms[1],
        "norm_frobenius": norms[2],
        "norm_max": norms[3],
        "symmetric": residual.symmetric,
        "hermitian": residual.hermitian,
        "skew": residual.skew,
        "orthogonal": residual.orthogonal,
        "scaled_orthogonal": residual.scaled_orthogonal,
        "normal": residual.normal,
        "departure": henrici.value,
        "departure_lower": henrici.lower,
        "departure_upper": henrici.upper,
        "departure_source": henrici.source,
        "balance_factor": balance.factor,
        "balance_choice": balance.choice,
        "balance_decades": balance.log10_range,
        "row_norm_decades": _decades(rows),
        "column_norm_decades": _decades(columns),
        "zero_rows": int(np.count_nonzero(np.isneginf(rows))),
        "zero_columns": int(np.count_nonzero(np.isneginf(columns))),
        "isolated": block.isolated,
        "components": block.components,
        "component_sizes": block.sizes,
        "grading_slope": trend.slope,
        "grading_decades": trend.decades,
        "grading_fit": trend.fit,
        "subnormal": subnormal,
        "zeros": zeros,
        "density": 1.0 - zeros / (n * n),
        "lower_bandwidth": lower,
        "upper_bandwidth": upper,
        "hessenberg": lower <= 1,
        "triangular": triangular,
        "seconds_estimate": cost.seconds,
        "memory_estimate": cost.memory,
        "remarks": (),
    }
    bare = Profile(**values)
    values["remarks"] = tuple(_remarks(bare, matrix, rows, columns, cost))
    return Profile(**values)


def _decades(log2_norms: structure.Real) -> float:
    """Decades between the largest and the smallest finite value."""
    finite = log2_norms[np.isfinite(log2_norms)]
    return float((finite.max() - finite.min()) * np.log10(2.0)) if finite.size else 0.0


def _remarks(
    p: Profile, matrix: WorkingMatrix, rows: structure.Real, columns: structure.Real, cost: Estimate
) -> list[str]:
    """Sentences on what stands out, most useful first."""
    ranked: list[tuple[int, str]] = []

    def say(rank: int, sentence: str) -> None:
        ranked.append((rank, sentence))

    if p.norm_max == 0.0:
        return ["Every entry is zero: the matrix is its own Schur form."]
    spread = ""
    if max(p.row_norm_decades, p.column_norm_decades) >= SPREAD_REMARK:
        by_row = p.row_norm_decades >= p.column_norm_decades
        level = np.where(np.isfinite(rows), rows, np.nan) if by_row else np.where(np.isfinite(columns), columns, np.nan)
        top, low = matrix.label(int(np.nanargmax(level))), matrix.label(int(np.nanargmin(level)))
        between = f" (largest: {top}, smallest: {low})" if matrix.labels else ""
        ratio = ten_to(p.row_norm_decades if by_row else p.column_norm_decades)
        spread = f"{'Rows' if by_row else 'Columns'} differ by {ratio} in norm{between}"
    if p.balance_factor >= BALANCE_REMARK:
        text = f"balancing would shrink the 1-norm {number(p.balance_factor)}-fold (balance={p.balance_choice!r})."
        say(10, f"{spread}; {text}" if spread else text[0].upper() + text[1:])
    elif spread:
        say(40, f"{spread}, and balancing would not change the norm much.")
    for word in p.structures[:1]:
        if "triangular" in word or word == "diagonal":
            say(5, f"The matrix is {word} already: its eigenvalues are its diagonal.")
        elif word == "complex symmetric":
            say(65, "The matrix is complex symmetric; the QR iteration makes no use of that.")
        else:
            say(20, f"The matrix is {word} to rounding; the diagnosis of a run names a solver that makes use of that.")
    if p.components > 1 and p.triangular == "no":
        out = p.n - (p.isolated[1] - p.isolated[0])
        take = f"; the default permutation takes {plural(out, 'eigenvalue')} out before any sweep" if out else ""
        into = f"{p.components} blocks, the largest of order {p.component_sizes[0]}"
        say(30, f"A permutation splits the matrix into {into}{take}.")
    if abs(p.grading_decades) >= GRADING_REMARK and p.grading_fit >= GRADING_FIT and p.n > 2:
        if p.grading_decades > 0:
            rise = f"Row norms rise by {p.grading_decades:.3g} decades from top to bottom"
            say(25, f"{rise}, against the grain of QR; flip=True turns it.")
        else:
            say(60, f"Row norms fall by {-p.grading_decades:.3g} decades from top to bottom, the orientation QR likes.")
    if p.departure is not None and p.departure >= 0.9 and p.triangular == "no":
        share = f"{100.0 * p.departure:.3g} %"
        say(50, f"Departure from normality is {share} of the norm: expect some eigenvalues to be sensitive.")
    if p.subnormal:
        count = plural(p.subnormal, "subnormal number")
        say(35, f"{count} among the entries, which slow the arithmetic on most processors.")
    if p.hessenberg and p.triangular == "no" and p.n > 2:
        say(70, "The matrix is upper Hessenberg already.")
    if cost.seconds >= 10.0:
        say(80, f"A run is expected to take about {number(cost.seconds)} s and {number(cost.memory / 2**20)} MiB.")
    return [sentence for _, sentence in sorted(ranked, key=lambda item: item[0])]
