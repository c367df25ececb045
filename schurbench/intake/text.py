"""Numbers in text files: comma, semicolon, tab or blanks between them, with state names in the first row or column."""

from __future__ import annotations

import csv
import re
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import numpy.typing as npt

from schurbench.errors import InputError
from schurbench.intake.checks import EXACT_INTEGER, Found, one_line, require_square
from schurbench.intake.limits import require_memory, require_room

__all__ = ["read_label_file", "read_text"]

_NUMBER = r"(?:\d+\.?\d*|\.\d+)(?:[eEdD][+-]?\d+)?|inf(?:inity)?|nan"
_REAL = re.compile(rf"[+-]?(?:{_NUMBER})", re.IGNORECASE | re.ASCII)
_COMPLEX = re.compile(
    rf"(?P<real>[+-]?(?:{_NUMBER}))(?P<imag>[+-](?:{_NUMBER})?)[ij]|(?P<only>[+-]?(?:{_NUMBER}))[ij]",
    re.IGNORECASE | re.ASCII,
)
_NUMBER_LIKE = re.compile(r"[+-]?\d[\d.,' ]*(?:[eE][+-]?\d+)?", re.ASCII)
_LONG_ROW = 100_000
_FIELD = re.compile(r"\S+")
_COMMENTS = ("#", "%")


def read_text(path: Path, what: str) -> Found:
    """The matrix of a ``.csv``, ``.tsv`` or ``.txt`` file.

    The separator is taken from the first line: semicolon, else tab, else comma, else blanks. A first row or first
    column that is not made of numbers gives the state names; where both are there, they must agree to be kept.
    Complex numbers are written ``1+2i`` or ``1+2j``, with or without brackets. Lines that start with ``#`` or ``%``
    are comments.

    Raises
    ------
    InputError
    """
    require_memory(path.stat().st_size, what=what)
    try:
        return _parse(path, what)
    except UnicodeDecodeError as error:
        raise InputError(
            f"{what} is not a UTF-8 text file; save it as text or use the suffix of its real format"
        ) from error
    except (OSError, csv.Error) as error:
        raise InputError(f"{what} cannot be read as text ({one_line(error)}); save it again") from error


def read_label_file(path: Path) -> list[str]:
    """State names, one a line; blank lines at the end are not names.

    Raises
    ------
    InputError
    """
    what = f"label file {one_line(path.name)}"
    if not path.is_file():
        raise InputError(f"{what} does not exist or is not a file; give a text file with one state name a line")
    require_memory(path.stat().st_size, what=what)
    try:
        lines = path.read_text(encoding="utf-8-sig").rstrip().split("\n")
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"{what} cannot be read as UTF-8 text ({one_line(error)}); save it again") from error
    return [line.strip() for line in lines]


def _rows(path: Path, what: str) -> Iterator[tuple[int, list[str]]]:
    """Line number and stripped fields of every line that is neither blank nor a comment."""
    separator: str | None = None
    sniffed = False
    with path.open(encoding="utf-8-sig", newline=None) as stream:
        for number, line in enumerate(stream, start=1):
            if "\0" in line:
                raise InputError(
                    f"{what} holds zero bytes at line {number} and is not text; use the suffix of its real format"
                )
            stripped = line.strip()
            if not stripped or stripped.startswith(_COMMENTS):
                continue
            if not sniffed:
                separator = next((mark for mark in ";\t," if mark in line), None)
                sniffed = True
                # A very long first line is measured before it is cut into pieces.
                columns = stripped.count(separator) + 1 if separator else sum(1 for _ in _FIELD.finditer(stripped))
                if columns > _LONG_ROW:
                    require_room(columns - 1, is_complex=False, what=what)
            if separator is None:
                yield number, stripped.split()
            else:
                # The separator may end every line; a tab may also open one, so only the line end is cut.
                fields = next(csv.reader([line.rstrip("\r\n")], delimiter=separator, skipinitialspace=True))
                yield number, [field.strip() for field in fields]


def _parse(path: Path, what: str) -> Found:
    rows = _rows(path, what)
    first = next(rows, None)
    if first is None:
        raise InputError(f"{what} holds no numbers; give a text file with one matrix row a line")
    second = next(rows, None)
    header = first[1] if _is_header(first[1], second[1] if second else None) else None
    start = second if header is not None else first
    if start is None:
        raise InputError(f"{what} holds names but no numbers; give a text file with one matrix row a line")
    indexed = _has_index(header, start[1])
    trailing = int(start[1][-1] == "" and len(start[1]) > 1)
    fields = len(start[1]) - trailing
    n = fields - indexed
    require_room(max(n, 1), is_complex=False, what=what)
    array: npt.NDArray[np.float64] | npt.NDArray[np.complex128] = np.zeros((max(n, 1), max(n, 1)))
    names: list[str] = []
    count = 0
    for number, row in _chain(start, second if header is None else None, rows):
        if trailing and row[-1] == "":
            row.pop()
        if len(row) != fields:
            raise InputError(
                f"{what} has {len(row)} fields at line {number} where the first row has {fields}; it may be "
                "truncated, write it again"
            )
        if indexed:
            names.append(row[0])
        if count < n:
            values = _numbers(row[indexed:], number, what)
            if values.dtype.kind == "c" and array.dtype.kind != "c":
                require_room(n, is_complex=True, what=what)
                array = array.astype(np.complex128)
            array[count] = values
        count += 1
    require_square((count, n), what)
    labels, notes = _labels(header, names if indexed else None, n)
    return Found(array, labels=labels, notes=notes)


def _chain(
    start: tuple[int, list[str]], second: tuple[int, list[str]] | None, rest: Iterator[tuple[int, list[str]]]
) -> Iterator[tuple[int, list[str]]]:
    yield start
    if second is not None:
        yield second
    yield from rest


def _is_number(field: str) -> bool:
    return _REAL.fullmatch(field) is not None or _complex_match(field) is not None


def _is_header(row: list[str], after: list[str] | None) -> bool:
    """Whether the first row holds names: nothing but names, or an empty corner over numbers."""
    if len(row) == 1:
        return not _is_number(row[0]) and after is not None
    if after is not None and len(after) == len(row) + 1:
        return True
    if row[0] == "":
        return after is not None and len(after) == len(row)
    body = row[1:-1] if row[-1] == "" and len(row) > 2 else row[1:]
    # A field such as 1,5 or 3 m/s in a row of numbers is a mistake to report, not a name.
    return not any(_is_number(field) for field in [row[0], *body])


def _has_index(header: list[str] | None, row: list[str]) -> int:
    if header is not None and (header[0] == "" or len(row) == len(header) + 1):
        return 1
    # 1,5 or 1.000,5 at the start of a row is a mistake to report, not a name.
    return int(len(row) > 1 and not _is_number(row[0]) and _NUMBER_LIKE.fullmatch(row[0]) is None)


def _labels(
    header: list[str] | None, names: list[str] | None, n: int
) -> tuple[tuple[str, ...] | None, tuple[str, ...]]:
    found = names
    if header is not None:
        # Over an index column there may be a corner field, or none as R writes it; a separator may end the row.
        trimmed = list(header)
        while len(trimmed) > n and trimmed[-1] == "":
            trimmed.pop()
        columns = trimmed[1:] if names is not None and len(trimmed) == n + 1 else trimmed
        if len(columns) != n:
            return None, (
                f"The first row has {len(columns)} names for {n} columns; they were not kept as state names.",
            )
        if names is not None and names != columns:
            return None, ("Row names and column names differ; neither were kept as state names.",)
        found = columns
    # Plain numbering is no naming, and a blank name would leave a state without one.
    if found is None or found == [str(i) for i in range(n)] or not all(found):
        return None, ()
    return tuple(found), ()


def _complex_match(field: str) -> re.Match[str] | None:
    text = field.replace(" ", "")
    if text.startswith("(") and text.endswith(")"):
        text = text[1:-1]
    # NumPy writes a negative imaginary part after a plus sign in fixed layouts.
    return _COMPLEX.fullmatch(text.replace("+-", "-"))


def _numbers(row: list[str], line: int, what: str) -> npt.NDArray[np.float64] | npt.NDArray[np.complex128]:
    joined = "".join(row)
    values: list[float] | list[complex]
    try:
        # float() also takes underscores and digits of other scripts, which no numerical program writes.
        if "_" in joined or not joined.isascii():
            raise ValueError
        values = [float(field) for field in row]
    except ValueError:
        values = [_number(field, column, line, what) for column, field in enumerate(row)]
    for field, value in zip(row, values, strict=True):
        # Digits first: the modulus of a complex number may overflow, and Python then raises.
        if field.lstrip("+-").isdigit() and EXACT_INTEGER <= abs(value) < float("inf"):
            _check_integer(field, line, what)
    return np.array(values)


def _number(field: str, column: int, line: int, what: str) -> float | complex:
    if _REAL.fullmatch(field):
        return _float(field)
    match = _complex_match(field)
    if match is None:
        advice = (
            "write numbers with a decimal point" if "," in field and _NUMBER_LIKE.fullmatch(field) else "correct it"
        )
        raise InputError(
            f"{what} has {one_line(repr(field[:40]))} at line {line}, field {column + 1} of the numbers, "
            f"which is not a number; {advice}"
        )
    if match["only"] is not None:
        return complex(0.0, _float(match["only"]))
    imaginary = match["imag"]
    return complex(_float(match["real"]), float(f"{imaginary}1") if imaginary in ("+", "-") else _float(imaginary))


def _float(text: str) -> float:
    """A number that may carry a Fortran exponent, as in 1.5D-3."""
    return float(text.lower().replace("d", "e"))


def _check_integer(field: str, line: int, what: str) -> None:
    if int(float(field)) != int(field):
        raise InputError(
            f"{what} holds the integer {field[:30]} at line {line}, which float64 cannot hold exactly; write it with a "
            "decimal point if rounding is acceptable"
        )
