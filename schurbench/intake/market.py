"""Matrix Market exchange files, plain or gzipped: coordinate and array, every field and symmetry, read by scipy.

Source: Boisvert, Pozo and Remington, The Matrix Market exchange formats: initial design, NISTIR 5935, 1996.
"""

from __future__ import annotations

import gzip
from dataclasses import dataclass
from pathlib import Path
from typing import IO, cast

from schurbench.errors import InputError
from schurbench.intake.checks import Found, one_line, require_square
from schurbench.intake.limits import require_memory, require_room

__all__ = ["read_market"]

_LONGEST_LINE = 1 << 16
_LONGEST_ENTRY = 256
"""Bytes that one entry line may take: two indices and two numbers of any sensible precision, many times over."""


@dataclass(frozen=True, slots=True)
class _Header:
    layout: str
    field: str
    symmetry: str
    rows: int
    columns: int
    entries: int
    length: int


def read_market(path: Path, what: str) -> Found:
    """The matrix of a ``.mtx`` or ``.mtx.gz`` file.

    The size line is checked before the entries are read: a few bytes of coordinates can announce a dense matrix of
    any size.

    Raises
    ------
    InputError
    """
    from scipy.io import mmread

    zipped = path.suffix.lower() == ".gz"
    try:
        with cast("IO[bytes]", gzip.open(path, "rb") if zipped else path.open("rb")) as stream:
            header = _read_header(stream, what)
            n = require_square((header.rows, header.columns), what)
            require_room(n, is_complex=header.field == "complex", what=what)
            # Row and column as 32 or 64-bit integers and a value of up to 16 bytes for every stored entry.
            require_memory(header.entries * 32, what=what)
            if zipped:
                _check_expanded_size(stream, header, what)
    except InputError:
        raise
    except (OSError, EOFError, ValueError) as error:
        raise InputError(f"{what} cannot be read ({one_line(error)}); it may be truncated, write it again") from error
    try:
        values = mmread(path)
    except Exception as error:
        raise InputError(
            f"{what} is not a sound Matrix Market file ({one_line(error)}); it may be truncated, write it again"
        ) from error
    notes: tuple[str, ...] = ()
    if header.field == "pattern":
        notes += ("The file is a pattern without values; every stored position counts as 1.",)
    if header.symmetry != "general":
        notes += (f"The file stores one triangle of a {header.symmetry} matrix; the other was filled in.",)
    return Found(values, notes=notes)


def _read_header(stream: IO[bytes], what: str) -> _Header:
    length = 0

    def next_line() -> str:
        nonlocal length
        line = stream.readline(_LONGEST_LINE)
        length += len(line)
        return line.decode("latin-1")

    banner = next_line().lower().split()
    if len(banner) != 5 or banner[0] != "%%matrixmarket" or banner[1] != "matrix":
        raise InputError(
            f"{what} does not start as a Matrix Market file (%%MatrixMarket matrix, then layout, field and "
            "symmetry); check the file"
        )
    layout, field, symmetry = banner[2:]
    line = next_line()
    while line.startswith("%") or (line and not line.strip()):
        line = next_line()
    try:
        sizes = [int(word) for word in line.split()]
    except ValueError:
        sizes = []
    if layout not in ("coordinate", "array") or len(sizes) != (3 if layout == "coordinate" else 2) or min(sizes) < 0:
        raise InputError(f"{what} has no valid size line after its comments; it may be truncated, write it again")
    entries = sizes[2] if layout == "coordinate" else sizes[0] * sizes[1]
    return _Header(layout, field, symmetry, sizes[0], sizes[1], entries, length)


def _check_expanded_size(stream: IO[bytes], header: _Header, what: str) -> None:
    # Counted without keeping anything, and stopped as soon as it is more than the announced entries can need.
    allowed = header.length + (header.entries + 16) * _LONGEST_ENTRY
    seen = header.length
    while block := stream.read(1 << 20):
        seen += len(block)
        if seen > allowed:
            raise InputError(
                f"{what} expands to far more than the {header.entries} entries it announces; check the file"
            )
