"""Rules that every matrix passes on its way in, whatever it came from: type, shape, size, finiteness."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, cast

import numpy as np
import numpy.typing as npt

from schurbench.errors import InputError
from schurbench.intake.limits import require_room

__all__ = [
    "EXACT_INTEGER",
    "Found",
    "accept_dense",
    "accept_sparse",
    "describe_dtype",
    "one_line",
    "require_finite",
    "require_numeric",
    "require_square",
    "widen",
]

EXACT_INTEGER = 2**53
"""Every integer up to here has its own float64; beyond it neighbours share one."""

Dense = npt.NDArray[np.float64] | npt.NDArray[np.complex128]


@dataclass(frozen=True, slots=True, eq=False)
class Found:
    """What a reader found in its source, before the common rules.

    Attributes
    ----------
    values : ndarray or scipy sparse array
        Two-dimensional or not, of any type: the common rules decide.
    key : str or None
        Name of the array inside its file.
    labels : tuple of str, or None
        State names in the source.
    notes : tuple of str
        Sentences on choices the reader made.
    """

    values: Any
    key: str | None = None
    labels: tuple[str, ...] | None = None
    notes: tuple[str, ...] = ()


def one_line(text: object) -> str:
    """Any text squeezed onto one line of at most 300 characters, since every refusal is one line."""
    line = "".join(c if c.isprintable() else " " for c in str(text))
    line = " ".join(line.split())
    return line if len(line) <= 300 else line[:297] + "..."


def require_square(shape: tuple[int, ...], what: str) -> int:
    """Order n of a square two-dimensional shape.

    Raises
    ------
    InputError
        When the shape is not (n, n) with n ≥ 1.
    """
    if len(shape) != 2:
        raise InputError(
            f"{what} has {len(shape)} dimension{'' if len(shape) == 1 else 's'}, not 2; give a square matrix"
        )
    rows, columns = shape
    if rows == 0 and columns == 0:
        raise InputError(f"{what} is empty (0 × 0); give a square matrix with at least one row")
    if rows != columns:
        raise InputError(f"{what} is {rows} × {columns}, not square; give a matrix with as many rows as columns")
    return int(rows)


def describe_dtype(dtype: np.dtype[Any]) -> str | None:
    """Why a type cannot become float64 or complex128 without loss; None when it can (integers: if small enough)."""
    if dtype.kind == "O":
        return "holds Python objects, not numbers; convert it to float64 or complex128 first"
    if dtype.kind in "US":
        return "holds text, not numbers; convert it to float64 or complex128 first"
    if dtype.kind in "mM":
        return "holds dates or time spans, not numbers; convert it to float64 in a unit of your choice first"
    if dtype.kind == "f" and dtype.itemsize > 8:
        return f"is {dtype.name}, wider than float64; round it to float64 yourself if that loss is acceptable"
    if dtype.kind == "c" and dtype.itemsize > 16:
        return f"is {dtype.name}, wider than complex128; round it to complex128 yourself if that loss is acceptable"
    if dtype.kind not in "biufc":
        return f"has entries of type {one_line(dtype)}, not plain numbers; convert it to float64 or complex128 first"
    return None


def require_numeric(dtype: np.dtype[Any], what: str) -> None:
    """Refuse entry types that cannot be widened without loss.

    Raises
    ------
    InputError
        For objects, text, dates, structured types and anything wider than float64 or complex128.
    """
    reason = describe_dtype(dtype)
    if reason is not None:
        raise InputError(f"{what} {reason}")


def widen(values: npt.NDArray[Any], what: str) -> tuple[Dense, tuple[str, ...]]:
    """Entries as float64 or complex128, exactly, with a sentence when the type changed.

    Parameters
    ----------
    values : ndarray, any shape
        Booleans, integers up to 2**53 in magnitude, float16 to float64, complex64, complex128, in either byte order.
    what : str
        The subject of an error message.

    Returns
    -------
    wide : ndarray of float64 or complex128
        Same shape; the same array where nothing had to change.
    notes : tuple of str

    Raises
    ------
    InputError
        When a type or an integer cannot be held without loss.
    """
    require_numeric(values.dtype, what)
    kind = values.dtype.kind
    if kind in "iu" and values.size and values.dtype.itemsize == 8:
        low, high = int(values.min()), int(values.max())
        worst = low if -low > high else high
        if abs(worst) > EXACT_INTEGER:
            raise InputError(
                f"{what} holds the integer {worst}, beyond 2**53, where float64 cannot hold every integer; "
                f"divide it by a power of two or convert it to float64 yourself if rounding is acceptable"
            )
    # The view turns an explicit byte order that is the machine's own into the type that later rooms compare with.
    wide: Dense = (
        values.astype(np.complex128, copy=False).view(np.complex128)
        if kind == "c"
        else values.astype(np.float64, copy=False).view(np.float64)
    )
    if values.dtype.newbyteorder("=") == wide.dtype:
        return wide, ()
    sort = {"b": "truth values", "i": "integers", "u": "integers"}.get(kind, "entries")
    return wide, (
        f"{sort.capitalize()} of type {values.dtype.name} were widened to {wide.dtype.name}, which holds each of "
        "them exactly.",
    )


def require_finite(array: Dense, what: str) -> None:
    """Refuse NaN and infinity.

    Raises
    ------
    InputError
        With the first place in row order, counted from 0.
    """
    finite = np.isfinite(array)
    if finite.all():
        return
    row, column = (int(i) for i in np.unravel_index(int(np.argmin(finite)), array.shape))
    value = array[row, column]
    kind = "NaN" if np.isnan(value) else "infinite"
    count = int(array.size - np.count_nonzero(finite))
    others = "" if count == 1 else f" ({count} such entries in all)"
    raise InputError(
        f"{what} is {kind} at row {row}, column {column}, counted from 0{others}; every entry must be a finite number"
    )


def accept_dense(values: npt.NDArray[Any], what: str, *, owned: bool) -> tuple[Dense, tuple[str, ...]]:
    """A dense array through every rule, as a row-major array that nobody else can write to.

    Parameters
    ----------
    values : ndarray
        Anything array-like that NumPy already holds.
    what : str
        The subject of an error message.
    owned : bool
        Whether the array was made by a reader and can be kept instead of copied.

    Raises
    ------
    InputError
    """
    if np.ma.isMaskedArray(values):
        if np.ma.getmaskarray(values).any():
            raise InputError(f"{what} has masked entries, which have no value; fill them first")
        values = np.ma.getdata(values)
    n = require_square(values.shape, what)
    require_numeric(values.dtype, what)
    require_room(n, is_complex=values.dtype.kind == "c", what=what)
    wide, notes = widen(values, what)
    shared = not owned and np.may_share_memory(wide, values)
    array = cast(Dense, np.array(wide, order="C", copy=True if shared else None, subok=False))
    require_finite(array, what)
    return array, notes + _imaginary_note(array)


def accept_sparse(values: Any, what: str) -> tuple[Dense, tuple[str, ...]]:
    """A scipy sparse matrix or array through every rule, expanded to a dense row-major array.

    Entries are widened before they are expanded, so repeated coordinates are added in float64 or complex128.

    Raises
    ------
    InputError
    """
    from scipy import sparse

    n = require_square(tuple(values.shape), what)
    require_numeric(values.dtype, what)
    require_room(n, is_complex=values.dtype.kind == "c", what=what)
    if hasattr(values, "check_format"):
        # Index arrays from a damaged file could otherwise point outside the dense array.
        try:
            values.check_format(full_check=True)
        except (ValueError, TypeError, IndexError) as error:
            raise InputError(f"{what} has damaged sparse indices ({one_line(error)}); write it again") from error
    triples = values.tocoo(copy=False)
    data, notes = widen(np.asarray(triples.data), what)
    places = triples.row.astype(np.int64) * n + triples.col
    repeated = int(places.size - np.unique(places).size)
    dense = sparse.coo_array((data, (triples.row, triples.col)), shape=(n, n)).toarray(order="C")
    require_finite(dense, what)
    if repeated:
        notes += (f"Entries stored more than once ({repeated} in all) were added together.",)
    notes += (f"The sparse matrix with {int(values.nnz)} stored entries was expanded to a dense one.",)
    return dense, notes + _imaginary_note(dense)


def _imaginary_note(array: Dense) -> tuple[str, ...]:
    if array.dtype.kind == "c" and not array.imag.any():
        return (
            "Every imaginary part is zero; the matrix stays complex because its type is. Give the real part "
            "to work in real arithmetic.",
        )
    return ()
