"""NumPy's ``.npy`` and ``.npz`` files, and sparse matrices that scipy wrote into ``.npz``. Nothing is unpickled."""

from __future__ import annotations

import io
import zipfile
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import IO, Any

import numpy as np

from schurbench.errors import InputError
from schurbench.intake.checks import Found, one_line, require_numeric, require_square
from schurbench.intake.choose import Candidate, choose
from schurbench.intake.limits import require_memory, require_room

__all__ = ["read_npy", "read_npz"]

_SPARSE_MEMBERS = frozenset({"format", "shape", "data"})


@dataclass(frozen=True, slots=True)
class _Header:
    shape: tuple[int, ...]
    dtype: np.dtype[Any]
    offset: int

    @property
    def expected_bytes(self) -> int:
        count = 1
        for length in self.shape:
            count *= length
        return self.offset + count * self.dtype.itemsize


def read_npy(path: Path, what: str) -> Found:
    """The array of a ``.npy`` file.

    The header is checked against the rules and the file's size before the data is read.

    Raises
    ------
    InputError
    """
    with path.open("rb") as stream:
        header = _read_header(stream, what)
        _check_header(header, path.stat().st_size, what)
        n = require_square(header.shape, what)
        require_room(n, is_complex=header.dtype.kind == "c", what=what)
        stream.seek(0)
        return Found(np.lib.format.read_array(stream, allow_pickle=False))


def read_npz(path: Path, key: str | None, what: str) -> Found:
    """One array of a ``.npz`` file, or the sparse matrix that ``scipy.sparse.save_npz`` wrote.

    Raises
    ------
    InputError
    """
    try:
        archive = zipfile.ZipFile(path)
    except Exception as error:
        raise InputError(
            f"{what} is not a readable .npz archive ({one_line(error)}); it may be truncated, write it again"
        ) from error
    with archive:
        members = {
            info.filename.removesuffix(".npy"): info for info in archive.infolist() if info.filename.endswith(".npy")
        }
        if not members:
            raise InputError(f"{what} holds no arrays; write it with numpy.savez or name another file")
        if members.keys() >= _SPARSE_MEMBERS:
            return _read_sparse(path, archive, members, key, what)
        headers = {name: _member_header(archive, info, f"{one_line(name)} in {what}") for name, info in members.items()}
        candidates = [Candidate(name, header.shape, _refusal(header)) for name, header in headers.items()]
        chosen, notes = choose(candidates, key, what)
        values = _member_array(archive, members[chosen], headers[chosen], f"{one_line(chosen)} in {what}")
        return Found(values, key=chosen, notes=notes)


def _read_header(stream: IO[bytes], what: str) -> _Header:
    try:
        version = np.lib.format.read_magic(stream)
    except ValueError as error:
        raise InputError(f"{what} is not a NumPy array file (wrong first bytes); write it with numpy.save") from error
    try:
        if version == (1, 0):
            shape, _, dtype = np.lib.format.read_array_header_1_0(stream)
        elif version == (2, 0):
            shape, _, dtype = np.lib.format.read_array_header_2_0(stream)
        else:
            # Version 3 exists only for structured types with non-Latin field names, which are refused anyway.
            raise InputError(
                f"{what} has format version {version[0]}.{version[1]}, which is for structured types; save "
                "plain numbers"
            )
    except InputError:
        raise
    except Exception as error:
        raise InputError(
            f"{what} has a damaged header ({one_line(error)}); it may be truncated, write it again"
        ) from error
    return _Header(tuple(int(length) for length in shape), dtype, stream.tell())


def _refusal(header: _Header) -> str | None:
    if header.dtype.hasobject:
        return "pickled objects"
    return None if header.dtype.kind in "biufc" else "not numbers"


def _check_header(header: _Header, size: int, what: str) -> None:
    if header.dtype.hasobject:
        raise InputError(
            f"{what} holds pickled Python objects, which are never unpickled; save it as float64 or complex128"
        )
    require_numeric(header.dtype, what)
    if any(length < 0 for length in header.shape):
        raise InputError(f"{what} has a damaged header (shape {header.shape}); write it again")
    if size != header.expected_bytes:
        state = "truncated" if size < header.expected_bytes else "damaged"
        raise InputError(
            f"{what} is {state}: its header announces {header.expected_bytes} bytes and there are {size}; "
            "write it again"
        )


def _member_header(archive: zipfile.ZipFile, info: zipfile.ZipInfo, what: str) -> _Header:
    try:
        with archive.open(info) as stream:
            return _read_header(stream, what)
    except InputError:
        raise
    except Exception as error:
        raise InputError(
            f"{what} cannot be read ({one_line(error)}); the archive may be damaged, write it again"
        ) from error


def _member_array(archive: zipfile.ZipFile, info: zipfile.ZipInfo, header: _Header, what: str) -> Any:
    # A member may claim any size in the archive's directory: it must agree with the array's own header, and fit.
    _check_header(header, info.file_size, what)
    n = require_square(header.shape, what)
    require_room(n, is_complex=header.dtype.kind == "c", what=what)
    return _read_member(archive, info, what)


def _read_member(archive: zipfile.ZipFile, info: zipfile.ZipInfo, what: str) -> Any:
    try:
        with archive.open(info) as stream:
            values = np.lib.format.read_array(stream, allow_pickle=False)
            # The zip checksum is verified only when the end of the member is reached.
            stream.read(1)
            return values
    except Exception as error:
        raise InputError(
            f"{what} cannot be read ({one_line(error)}); the archive may be damaged, write it again"
        ) from error


def _read_sparse(
    path: Path, archive: zipfile.ZipFile, members: Mapping[str, zipfile.ZipInfo], key: str | None, what: str
) -> Found:
    from scipy import sparse

    if key is not None:
        raise InputError(f"{what} holds one sparse matrix and no named arrays; leave the key out")
    expanded = 0
    for name, info in members.items():
        header = _member_header(archive, info, f"{one_line(name)} in {what}")
        if header.dtype.hasobject or info.file_size != header.expected_bytes:
            raise InputError(
                f"{what} has a damaged or pickled member {one_line(name)}; write it again with scipy.sparse.save_npz"
            )
        expanded += info.file_size
    require_memory(expanded, what=what)
    shape = np.atleast_1d(_read_member(archive, members["shape"], f"shape in {what}"))
    n = require_square(tuple(int(length) for length in shape), what)
    require_room(n, is_complex=False, what=what)
    try:
        values = sparse.load_npz(io.BytesIO(path.read_bytes()))
    except Exception as error:
        raise InputError(f"{what} cannot be read as a sparse matrix ({one_line(error)}); write it again") from error
    return Found(values)
