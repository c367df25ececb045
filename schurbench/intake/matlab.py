"""MATLAB files: versions 4 to 7 through scipy, version 7.3 (HDF5) through h5py where it is installed."""

from __future__ import annotations

import math
import struct
import zlib
from pathlib import Path
from typing import IO, Any

import numpy as np

from schurbench.errors import InputError
from schurbench.intake.checks import Found, one_line, require_square, widen
from schurbench.intake.choose import Candidate, choose
from schurbench.intake.limits import require_memory, require_room

__all__ = ["read_matlab"]

_HDF5_SIGNATURE = b"\x89HDF\r\n\x1a\n"
_NUMBERS = frozenset(
    {"double", "single", "logical", "int8", "int16", "int32", "int64", "uint8", "uint16", "uint32", "uint64"}
)
# Codes of the MAT-File Format (The MathWorks), Level 5: data types, array flags and classes.
_INT32, _UINT32, _MATRIX, _COMPRESSED = 5, 6, 14, 15
_NUMBER_BYTES = {1: 1, 2: 1, 3: 2, 4: 2, 5: 4, 6: 4, 7: 4, 9: 8, 12: 8, 13: 8}
_COMPLEX_FLAG, _SPARSE_CLASS = 0x800, 5
_PIECE = 1 << 16
_KNOWN_FILTERS = frozenset({1, 2, 3, 4})  # deflate, shuffle, Fletcher checksum, szip: filters that HDF5 itself ships


def read_matlab(path: Path, key: str | None, what: str) -> Found:
    """One variable of a ``.mat`` file of any version.

    Raises
    ------
    InputError
        Also when the file is of version 7.3 and h5py is not installed.
    """
    with path.open("rb") as stream:
        head = stream.read(520)
    # Version 7.3 is an HDF5 file, which MATLAB starts after a block of 512 bytes of its own.
    if head.startswith(_HDF5_SIGNATURE) or head[512:520] == _HDF5_SIGNATURE:
        return _read_hdf5(path, key, what)
    return _read_classic(path, key, what)


def _read_classic(path: Path, key: str | None, what: str) -> Found:
    from scipy.io import loadmat, whosmat

    try:
        listed = whosmat(path)
    except Exception as error:
        raise _damaged(what, error) from error
    candidates = [
        Candidate(
            str(name), tuple(int(length) for length in shape), None if sort in _NUMBERS | {"sparse"} else str(sort)
        )
        for name, shape, sort in listed
        if name != "__function_workspace__"  # where MATLAB keeps what anonymous functions refer to
    ]
    sort_of = {str(name): str(sort) for name, _, sort in listed}
    chosen, notes = choose(candidates, key, what)
    candidate = next(c for c in candidates if c.name == chosen)
    label = f"{one_line(chosen)} in {what}"
    if candidate.refusal is not None:
        raise InputError(
            f"{label} is of class {one_line(candidate.refusal)}, not a matrix of numbers; choose a numeric variable"
        )
    n = require_square(candidate.shape, label)
    require_room(n, is_complex=False, what=label)
    try:
        _check_elements(path, chosen)
        values = loadmat(path, variable_names=[chosen])[chosen]
    except Exception as error:
        raise _damaged(what, error) from error
    # MATLAB packs whole numbers of its floating classes into the shortest integer type: that is not the matrix's type.
    # (scipy's own mat_dtype=True would unpack them, but drops imaginary parts; scipy 1.17.1.)
    if sort_of[chosen] == "double":
        values, _ = widen(values, label)
    elif sort_of[chosen] == "single":
        values = values.astype(np.complex64 if values.dtype.kind == "c" else np.float32)
    elif sort_of[chosen] == "logical":
        values = values != 0
    return Found(values, key=chosen, notes=notes)


def _damaged(what: str, error: Exception) -> InputError:
    reason = one_line(error) or type(error).__name__
    return InputError(f"{what} cannot be read as a MATLAB file ({reason}); it may be truncated, save it again")


def _check_elements(path: Path, name: str) -> None:
    """Follow the structure of one variable through the file, and refuse what its own sizes contradict.

    scipy's compiled reader trusts the type codes inside a variable: one wrong byte there brings the process down
    (1.17.1, measured). Source: MAT-File Format (The MathWorks), chapter 1, Level 5 MAT-file format.
    """
    with path.open("rb") as stream:
        order = {b"IM": "<", b"MI": ">"}.get(stream.read(128)[126:128])
        if order is None:
            return  # Version 4 is a plain header and its numbers.
        while len(tag := stream.read(8)) == 8:
            sort, count = struct.unpack(f"{order}II", tag)
            start = stream.tell()
            element = _Element(stream, count, order, compressed=sort == _COMPRESSED)
            if sort == _COMPRESSED:
                sort, _ = struct.unpack(f"{order}II", element.read(8))
            if sort == _MATRIX and _is_sound(element, name):
                return
            stream.seek(start + count)
    raise ValueError(f"no variable named {name}")


class _Element:
    """The bytes of one variable, inflated on the way where they are compressed, never more of them than asked for."""

    def __init__(self, stream: IO[bytes], count: int, order: str, *, compressed: bool) -> None:
        self._stream, self._left, self.order = stream, count, order
        self._inflate = zlib.decompressobj() if compressed else None

    def read(self, count: int) -> bytes:
        pieces = b""
        while len(pieces) < count:
            wanted = count - len(pieces)
            if self._inflate is None:
                source = piece = self._take(wanted)
            else:
                source = self._inflate.unconsumed_tail or self._take(_PIECE)
                piece = self._inflate.decompress(source, wanted)
            # Inflating may take several pieces to give the first byte; without any source it never will.
            if not source and not piece:
                raise ValueError("a variable ends before its data does")
            pieces += piece
        return pieces

    def _take(self, count: int) -> bytes:
        piece = self._stream.read(min(count, self._left))
        self._left -= len(piece)
        return piece

    def skip(self, count: int) -> None:
        while count > 0:
            count -= len(self.read(min(count, _PIECE)))

    def tag(self) -> tuple[int, int, bytes]:
        """Type code, byte count, and the data itself where it is packed into the tag."""
        raw = self.read(8)
        first, count = struct.unpack(f"{self.order}II", raw)
        if first >> 16:
            return first & 0xFFFF, first >> 16, raw[4:]
        return first, count, b""

    def small(self, limit: int) -> tuple[int, bytes]:
        """A sub-element that must be short, whole."""
        sort, count, packed = self.tag()
        if packed:
            if count > 4:
                raise ValueError("a packed element is too long")
            return sort, packed[:count]
        if count > limit:
            raise ValueError("a header element is too long")
        return sort, self.read(count + -count % 8)[:count]

    def numbers(self, exact: int | None) -> None:
        """Pass over a sub-element of numbers: of a known type, and of the announced length where there is one."""
        sort, count, packed = self.tag()
        size = _NUMBER_BYTES.get(sort)
        if size is None or count % size or (exact is not None and count != exact * size):
            raise ValueError("the type or length of the numbers contradicts the header")
        if not packed:
            self.skip(count + -count % 8)


def _is_sound(element: _Element, name: str) -> bool:
    """Whether this is the variable of that name; its structure is followed to the end, or ValueError raised."""
    sort, flags = element.small(8)
    if sort != _UINT32 or len(flags) != 8:
        raise ValueError("a variable does not start with its flags")
    word = struct.unpack(f"{element.order}II", flags)[0]
    sort, dimensions = element.small(64)
    if sort not in (_INT32, _UINT32) or len(dimensions) % 4:
        raise ValueError("a variable has damaged dimensions")
    shape = struct.unpack(f"{element.order}{len(dimensions) // 4}i", dimensions)
    _, raw = element.small(4096)
    if raw.decode("latin-1") != name:
        return False
    if min(shape, default=-1) < 0:
        raise ValueError("a variable has damaged dimensions")
    parts = 2 if word & _COMPLEX_FLAG else 1
    if word & 0xFF == _SPARSE_CLASS:
        element.numbers(None)
        element.numbers(shape[1] + 1)
        for _ in range(parts):
            element.numbers(None)
    else:
        for _ in range(parts):
            element.numbers(math.prod(shape))
    return True


def _read_hdf5(path: Path, key: str | None, what: str) -> Found:
    try:
        import h5py
    except ImportError as error:
        raise InputError(
            f"{what} is a MATLAB 7.3 file, which needs h5py; install schurbench[formats] or save it with -v7"
        ) from error
    try:
        with h5py.File(path, "r") as file:
            candidates = [_hdf5_candidate(h5py, file, name) for name in file if not str(name).startswith("#")]
            chosen, notes = choose(candidates, key, what)
            candidate = next(c for c in candidates if c.name == chosen)
            label = f"{one_line(chosen)} in {what}"
            if candidate.refusal is not None:
                raise InputError(
                    f"{label} is not a matrix of numbers ({one_line(candidate.refusal)}); choose a numeric variable"
                )
            n = require_square(candidate.shape, label)
            node = file[chosen]
            if isinstance(node, h5py.Group):
                require_room(n, is_complex=False, what=label)
                return Found(_hdf5_sparse(node, n, label), key=chosen, notes=notes)
            require_room(n, is_complex=node.dtype.kind in "cV", what=label)
            return Found(_hdf5_dense(node, label), key=chosen, notes=notes)
    except InputError:
        raise
    except Exception as error:
        raise _damaged(what, error) from error


def _hdf5_candidate(h5py: Any, file: Any, name: str) -> Candidate:
    if not isinstance(file.get(name, getlink=True), h5py.HardLink):
        return Candidate(name, (), "a link, which is not followed")
    node = file[name]
    sort = node.attrs.get("MATLAB_class", b"")
    sort = sort.decode("latin-1") if isinstance(sort, bytes) else str(sort)
    if isinstance(node, h5py.Group):
        if "MATLAB_sparse" not in node.attrs:
            return Candidate(name, (), sort or "a group")
        parts = [part for part in ("data", "ir", "jc") if part in node]
        for part in parts:
            if not isinstance(node.get(part, getlink=True), h5py.HardLink):
                return Candidate(name, (), "a link, which is not followed")
            if refusal := _hdf5_refusal(node[part]):
                return Candidate(name, (), refusal)
        columns = int(node["jc"].shape[0]) - 1 if "jc" in parts else 0
        return Candidate(name, (int(node.attrs["MATLAB_sparse"]), columns))
    shape = tuple(int(length) for length in (node.shape or ()))[::-1]
    if node.attrs.get("MATLAB_empty"):
        # An empty variable is stored as the list of its dimensions.
        return Candidate(name, tuple(int(length) for length in node[()]) if node.size <= 32 else ())
    if sort and sort not in _NUMBERS:
        return Candidate(name, shape, sort)
    return Candidate(name, shape, _hdf5_refusal(node))


def _hdf5_refusal(dataset: Any) -> str | None:
    """Why a dataset is not read: data outside the file, a filter that would load foreign code, or no numbers."""
    if dataset.external or dataset.is_virtual:
        return "its data lies in other files, which are not opened"
    plist = dataset.id.get_create_plist()
    if any(plist.get_filter(i)[0] not in _KNOWN_FILTERS for i in range(plist.get_nfilters())):
        return "compressed with a filter that HDF5 does not ship"
    dtype = dataset.dtype
    if dtype.kind == "V" and dtype.names == ("real", "imag"):
        return None
    return None if dtype.kind in "biufc" else "not numbers"


def _require_hdf5_memory(dataset: Any, what: str) -> None:
    # A chunk is expanded whole, and may be declared larger than the data in it.
    chunk = int(np.prod([int(length) for length in dataset.chunks or ()], dtype=object)) if dataset.chunks else 0
    require_memory((int(dataset.size) + chunk) * int(dataset.dtype.itemsize), what=what)


def _hdf5_numbers(dataset: Any, what: str) -> Any:
    _require_hdf5_memory(dataset, what)
    values = dataset[()]
    if values.dtype.names == ("real", "imag"):
        real, imag = values["real"], values["imag"]
        joined = np.empty(values.shape, dtype=np.result_type(real.dtype, np.complex64))
        joined.real, joined.imag = real, imag
        return joined
    return values


def _hdf5_dense(dataset: Any, what: str) -> Any:
    sort = dataset.attrs.get("MATLAB_class", b"")
    values = _hdf5_numbers(dataset, what)
    if sort in (b"logical", "logical"):
        values = values != 0
    # MATLAB stores by columns and HDF5 by rows, so the file's array is the transpose of the variable.
    return values.T


def _hdf5_sparse(group: Any, n: int, what: str) -> Any:
    from scipy import sparse

    pointers = _hdf5_numbers(group["jc"], what).astype(np.int64)
    if "data" not in group or "ir" not in group:
        # MATLAB leaves both out of a sparse matrix without stored entries.
        if pointers.any():
            raise InputError(f"{what} is a damaged sparse variable without entries; save it again")
        return sparse.csc_array((n, n), dtype=np.float64)
    data, rows = _hdf5_numbers(group["data"], what), _hdf5_numbers(group["ir"], what).astype(np.int64)
    return sparse.csc_array((data, rows, pointers), shape=(n, n))
