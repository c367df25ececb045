"""MATLAB files: versions 4 to 7 through scipy, version 7.3 (HDF5) through h5py where it is installed."""

from __future__ import annotations

import struct
import zlib
from pathlib import Path
from typing import Any

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
_COMPRESSED = 15  # miCOMPRESSED, MAT-File Format (The MathWorks), table "MAT-file data types"
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
    _check_expanded_size(path, what)
    try:
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


def _check_expanded_size(path: Path, what: str) -> None:
    """Add up what the compressed variables expand to, keeping nothing, and refuse more than the memory holds."""
    expanded = 0
    with path.open("rb") as stream:
        head = stream.read(128)
        order = {b"IM": "<", b"MI": ">"}.get(head[126:128])
        if order is None:
            return  # Version 4 has no compression: its size is the file's.
        while len(tag := stream.read(8)) == 8:
            sort, count = struct.unpack(f"{order}II", tag)
            if sort != _COMPRESSED:
                stream.seek(count, 1)
                continue
            inflate = zlib.decompressobj()
            left = count
            while left > 0 and (block := stream.read(min(left, 1 << 16))):
                left -= len(block)
                try:
                    while block:
                        expanded += len(inflate.decompress(block, 1 << 20))
                        block = inflate.unconsumed_tail
                except zlib.error as error:
                    raise _damaged(what, error) from error
                require_memory(expanded, what=what)


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
