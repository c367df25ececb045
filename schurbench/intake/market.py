"""Matrix Market exchange files, plain or gzipped: coordinate and array, every field and symmetry, built by scipy.

Source: Boisvert, Pozo and Remington, The Matrix Market exchange formats: initial design, NISTIR 5935, 1996.

Every line is checked against that format before scipy sees it. Its compiled reader (1.17.1, measured) takes ``1D3``
for 1 and an integer ``1.5`` for 1 without a word, and on a file cut short it can bring the whole process down.
"""

from __future__ import annotations

import gzip
import io
import re
import zlib
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import IO, NoReturn, cast

from schurbench.errors import InputError
from schurbench.intake.checks import EXACT_INTEGER, Found, one_line, require_square
from schurbench.intake.limits import require_memory, require_room

__all__ = ["read_market"]

_LONGEST_LINE = 4096
_LONGEST_ENTRY = 256
"""Bytes that an entry may take on average: two indices and two numbers of any sensible precision, many times over."""

_ENTRY_IN_MEMORY = 160
"""Bytes an entry takes while it is read: its text twice, its indices and its value."""

_LONGEST_COMMENT = 1 << 20

_WHOLE = rb"[+-]?\d+"
_NUMBER = rb"[+-]?(?:(?:\d+\.?\d*|\.\d+)(?:[eEdD][+-]?\d+)?|nan|inf(?:inity)?)"
_VALUES = {
    "real": rb"(" + _NUMBER + rb")",
    "complex": rb"(" + _NUMBER + rb")\s+(" + _NUMBER + rb")",
    "integer": rb"(" + _WHOLE + rb")",
    "pattern": rb"",
}
_FIELDS = {"double": "real", "unsigned-integer": "integer"} | {name: name for name in _VALUES}
_SYMMETRIES = ("general", "symmetric", "skew-symmetric", "hermitian")


@dataclass(frozen=True, slots=True)
class _Header:
    layout: str
    field: str
    symmetry: str
    n: int
    entries: int


def read_market(path: Path, what: str) -> Found:
    """The matrix of a ``.mtx`` or ``.mtx.gz`` file.

    The size line is checked before the entries are read: a few bytes of coordinates can announce a dense matrix of any
    size.

    Raises
    ------
    InputError
    """
    from scipy.io import mmread

    zipped = path.suffix.lower() == ".gz"
    try:
        with cast("IO[bytes]", gzip.open(path, "rb") if zipped else path.open("rb")) as stream:
            lines = _lines(stream, what)
            header = _read_header(lines, what)
            require_room(header.n, is_complex=header.field == "complex", what=what)
            require_memory(header.entries * _ENTRY_IN_MEMORY, what=what)
            body = _sound_body(lines, header, what)
    except (OSError, EOFError, zlib.error) as error:
        raise InputError(f"{what} cannot be read ({one_line(error)}); it may be truncated, write it again") from error
    try:
        values = mmread(io.BytesIO(body))
    except Exception as error:
        raise InputError(f"{what} is not a sound Matrix Market file ({one_line(error)}); write it again") from error
    notes: tuple[str, ...] = ()
    if header.field == "pattern":
        notes += ("The file is a pattern without values; every stored position counts as 1.",)
    if header.symmetry != "general":
        notes += (f"The file stores one triangle of a {header.symmetry} matrix; the other was filled in.",)
    return Found(values, notes=notes)


def _lines(stream: IO[bytes], what: str) -> Iterator[tuple[int, bytes]]:
    """Line numbers from 1 and lines, never more than a bounded piece in memory."""
    number = 0
    while line := stream.readline(_LONGEST_LINE):
        number += 1
        if len(line) == _LONGEST_LINE:
            raise InputError(f"{what} has a line of more than {_LONGEST_LINE} bytes at line {number}; check the file")
        yield number, line


def _entry_lines(lines: Iterator[tuple[int, bytes]], allowed: int, what: str) -> Iterator[tuple[int, bytes]]:
    """Stripped lines without blanks and comments, as long as the file stays near the length it announces.

    A small gzip file can expand to any length of blank lines.
    """
    spent = 0
    for number, line in lines:
        spent += len(line)
        if spent > allowed:
            raise InputError(f"{what} is far longer than the entries it announces; check the file")
        stripped = line.strip()
        if stripped and not stripped.startswith(b"%"):
            yield number, stripped


def _read_header(lines: Iterator[tuple[int, bytes]], what: str) -> _Header:
    banner = next(lines, (0, b""))[1].decode("latin-1").lower().split()
    if len(banner) != 5 or banner[:2] != ["%%matrixmarket", "matrix"]:
        raise InputError(
            f"{what} does not start as a Matrix Market file (%%MatrixMarket matrix, then layout, field and symmetry); "
            "check the file"
        )
    layout, field, symmetry = banner[2:]
    if layout not in ("coordinate", "array") or field not in _FIELDS or symmetry not in _SYMMETRIES:
        raise InputError(
            f"{what} announces {one_line(' '.join(banner[2:]))}, which the format does not know; check line 1"
        )
    if layout == "array" and field == "pattern":
        raise InputError(f"{what} announces an array without values (pattern); check line 1")
    size = next(_entry_lines(lines, _LONGEST_COMMENT, what), (0, b""))[1]
    if not re.fullmatch(rb"\d{1,18}(\s+\d{1,18})" + (rb"{2}" if layout == "coordinate" else b"{1}"), size):
        raise InputError(f"{what} has no valid size line after its comments; it may be truncated, write it again")
    sizes = [int(word) for word in size.split()]
    n = require_square((sizes[0], sizes[1]), what)
    triangle = {"general": n * n, "skew-symmetric": n * (n - 1) // 2}.get(symmetry, n * (n + 1) // 2)
    return _Header(layout, _FIELDS[field], symmetry, n, sizes[2] if layout == "coordinate" else triangle)


def _sound_body(lines: Iterator[tuple[int, bytes]], header: _Header, what: str) -> bytes:
    """The file again, each entry checked, with ``e`` for Fortran's ``d`` and without plus signs, for scipy to read."""
    coordinate = header.layout == "coordinate"
    places = rb"(\d{1,18})\s+(\d{1,18})" + (rb"" if header.field == "pattern" else rb"\s+") if coordinate else rb""
    entry = re.compile(places + _VALUES[header.field], re.IGNORECASE)
    size = f"{header.n} {header.n}" + (f" {header.entries}" if coordinate else "")
    sound = [f"%%MatrixMarket matrix {header.layout} {header.field} {header.symmetry}\n{size}".encode()]
    seen = 0
    allowed = _LONGEST_COMMENT + header.entries * _LONGEST_ENTRY
    for number, line in _entry_lines(lines, allowed, what):
        match = entry.fullmatch(line)
        if match is None:
            shown = one_line(repr(line[:40].decode("latin-1")))
            raise InputError(
                f"{what} has {shown} at line {number}, not an entry of a {header.field} {header.layout} file; "
                "correct it"
            )
        seen += 1
        if seen > header.entries:
            raise InputError(f"{what} has more than the {header.entries} entries it announces; check its size line")
        groups = match.groups()
        if coordinate:
            _check_place(int(groups[0]), int(groups[1]), groups[2:], header, number, what)
        if header.field == "integer" and abs(int(groups[-1])) > EXACT_INTEGER:
            raise InputError(
                f"{what} holds the integer {groups[-1].decode()[:30]} at line {number}, beyond 2**53, where float64 "
                "cannot hold every integer; write it as real if rounding is acceptable"
            )
        sound.append(b" ".join(group.lower().replace(b"d", b"e").lstrip(b"+") for group in groups))
    if seen < header.entries:
        raise InputError(f"{what} is truncated: it announces {header.entries} entries and has {seen}; write it again")
    sound.append(b"")
    return b"\n".join(sound)


def _check_place(row: int, column: int, values: tuple[bytes, ...], header: _Header, number: int, what: str) -> None:
    def refuse(reason: str) -> NoReturn:
        raise InputError(f"{what} has an entry at row {row}, column {column} (counted from 1, line {number}) {reason}")

    if not (1 <= row <= header.n and 1 <= column <= header.n):
        refuse(f"outside its {header.n} × {header.n} matrix; correct it")
    if header.symmetry == "general":
        return
    if column > row:
        # Mirrored, it would be added to the entry of the lower triangle.
        refuse(
            f"above the diagonal, where a {header.symmetry} file stores nothing; write one triangle or a general file"
        )
    if row == column and header.symmetry != "symmetric" and any(float(value) for value in _must_vanish(values, header)):
        refuse(f"on the diagonal that a {header.symmetry} matrix cannot have; correct it")


def _must_vanish(values: tuple[bytes, ...], header: _Header) -> tuple[str, ...]:
    """The parts of a diagonal value that the symmetry forces to zero."""
    parts = values if header.symmetry == "skew-symmetric" else values[1:]
    return tuple(part.decode().lower().replace("d", "e") for part in parts)
