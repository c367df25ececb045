"""`load`: whatever an engineer has her matrix in, through one set of rules, into a `WorkingMatrix`."""

from __future__ import annotations

import dataclasses
import hashlib
import inspect
import os
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from schurbench.errors import InputError
from schurbench.intake.checks import EXACT_INTEGER, Found, accept_dense, accept_sparse, one_line
from schurbench.intake.market import read_market
from schurbench.intake.matlab import read_matlab
from schurbench.intake.matrix import WorkingMatrix
from schurbench.intake.numpy_files import read_npy, read_npz
from schurbench.intake.text import read_label_file, read_text

__all__ = ["load"]

_SUFFIXES = ".npy, .npz, .mtx, .mtx.gz, .mat, .csv, .tsv or .txt"
_MASS_NAMES = ("E", "M", "mass")


def load(
    source: Any,
    key: str | None = None,
    labels: Sequence[str] | str | os.PathLike[str] | None = None,
    name: str | None = None,
) -> WorkingMatrix:
    """Take in a square matrix from a file or an object.

    Parameters
    ----------
    source : path or object
        A path to ``.npy``, ``.npz``, Matrix Market (``.mtx``, ``.mtx.gz``), MATLAB ``.mat`` (7.3 needs h5py) or text
        (``.csv``, ``.tsv``, ``.txt``); a NumPy array or nested lists; a scipy sparse matrix; a pandas frame; an
        object with a square ``.A``, such as a state-space model; or a `WorkingMatrix`, which is returned as it is
        unless labels or a name are given.
    key : str, optional
        Name of the array in a ``.npz`` or ``.mat`` file. Without it the only array, or the only square one, is taken.
    labels : sequence of n str, or path, optional
        State names, or a text file with one a line. They replace names found in the source.
    name : str, optional
        Name for titles and files; by default the file's, or that of the object's type.

    Returns
    -------
    WorkingMatrix
        With a write-protected copy of shape (n, n), float64 or complex128. Its `notes` say what was changed or chosen
        on the way.

    Raises
    ------
    InputError
        One line on what was found and what to do: not square, empty, not finite, not numbers, pickled, truncated, of
        unknown format, too large for the memory, or not held exactly by float64.

    Notes
    -----
    Nothing is rounded: booleans, integers up to 2**53 in magnitude and shorter floats are widened, longer ones
    refused. No data file runs code: nothing is unpickled or evaluated, and links to other files are not followed.
    """
    if key is not None and not isinstance(key, str):
        raise InputError(f"key is a {type(key).__name__}, not the name of an array; give a string")
    if isinstance(source, WorkingMatrix):
        _refuse_key(key, "a matrix already taken in")
        changes: dict[str, Any] = {}
        if labels is not None:
            changes["labels"] = _given_labels(labels, source.n)
        if name is not None:
            changes["name"] = _given_name(name)
        return dataclasses.replace(source, **changes) if changes else source
    if isinstance(source, str | os.PathLike):
        path = Path(source)
        found, what = _read_file(path, key)
        origin, default_name, owned = str(path), _stem(path), True
    else:
        found, what = _read_object(source)
        _refuse_key(key, what)
        origin, default_name, owned = what, "matrix", False
    from scipy.sparse import issparse

    if issparse(found.values):
        array, notes = accept_sparse(found.values, what)
    else:
        array, notes = accept_dense(found.values, what, owned=owned)
    n = int(array.shape[0])
    return WorkingMatrix(
        array=array,
        name=default_name if name is None else _given_name(name),
        source=origin,
        labels=found.labels if labels is None else _given_labels(labels, n),
        notes=found.notes + notes,
        key=found.key,
        file_sha256=_file_sha256(path) if owned else None,
    )


def _read_file(path: Path, key: str | None) -> tuple[Found, str]:
    what = one_line(path.name) or one_line(path)
    try:
        if path.is_dir():
            raise InputError(f"{what} is a directory; name a file in it")
        if not path.exists():
            raise InputError(f"{one_line(path)} does not exist; check the path")
        if not path.is_file():
            raise InputError(f"{what} is not a regular file; copy its data into one")
        if path.stat().st_size == 0:
            raise InputError(f"{what} is an empty file (0 bytes); write it again")
        suffix = path.suffix.lower()
        if suffix == ".npz":
            found = read_npz(path, key, what)
            return found, what if found.key is None else f"{one_line(found.key)} in {what}"
        if suffix == ".mat":
            found = read_matlab(path, key, what)
            return found, f"{one_line(found.key)} in {what}"
        readers = {".npy": read_npy, ".mtx": read_market, ".csv": read_text, ".tsv": read_text, ".txt": read_text}
        if path.name.lower().endswith(".mtx.gz"):
            suffix = ".mtx"
        if suffix not in readers:
            raise InputError(f"{what} has an unknown suffix; give a {_SUFFIXES} file")
        _refuse_key(key, what)
        return readers[suffix](path, what), what
    except InputError:
        raise
    except MemoryError as error:
        raise InputError(
            f"{what} does not fit into memory; use a smaller file or a machine with more memory"
        ) from error
    except (OSError, ValueError) as error:
        # A path with a zero byte, no permission, a disk that fails halfway.
        raise InputError(f"{what} cannot be read ({one_line(error)}); check the path and its permissions") from error


def _stem(path: Path) -> str:
    inner = Path(path.stem)
    return one_line(inner.stem if path.suffix.lower() == ".gz" else inner) or "matrix"


def _file_sha256(path: Path) -> str:
    try:
        with path.open("rb") as stream:
            return hashlib.file_digest(stream, "sha256").hexdigest()
    except OSError as error:
        raise InputError(
            f"{one_line(path.name)} cannot be read ({one_line(error)}); check the path and its permissions"
        ) from error


def _refuse_key(key: str | None, what: str) -> None:
    if key is not None:
        raise InputError(f"{what} holds one matrix and no named arrays; leave key out (it was {one_line(repr(key))})")


def _read_object(source: Any) -> tuple[Found, str]:
    from scipy.sparse import issparse

    # A frame can only exist where pandas has been imported, so it need not be imported to recognise one.
    pandas = sys.modules.get("pandas")
    if isinstance(source, np.ndarray):
        return Found(source), "array"
    if issparse(source):
        return Found(source), "sparse matrix"
    if pandas is not None and isinstance(source, pandas.DataFrame):
        return _from_frame(source, pandas), "data frame"
    if isinstance(source, list | tuple):
        return Found(_from_lists(source)), "list"
    if isinstance(source, bytes | bytearray | memoryview):
        raise InputError("bytes were given, not a matrix; write them to a file and give its path")
    if hasattr(source, "A"):
        return _from_model(source)
    if hasattr(source, "__array__"):
        kind = one_line(type(source).__name__)
        try:
            return Found(np.array(source)), kind
        except Exception as error:
            raise InputError(
                f"{kind} cannot be turned into an array ({one_line(error)}); give a NumPy array"
            ) from error
    raise InputError(
        f"an object of type {one_line(type(source).__name__)} is not a matrix; give a path, an array, a sparse matrix, a data "
        "frame or an object with .A"
    )


def _from_lists(source: Sequence[Any]) -> Any:
    try:
        values = np.array(source)
    except (ValueError, OverflowError, TypeError) as error:
        raise InputError(
            f"list is not a rectangular table of numbers ({one_line(error)}); give rows of equal length"
        ) from error
    if values.dtype.kind in "fc" and values.ndim == 2:
        # Mixed with a float, a large Python integer has been rounded already: look at what was given.
        for row in source:
            for value in row:
                if isinstance(value, int | np.integer) and abs(int(value)) > EXACT_INTEGER:
                    raise InputError(
                        f"list holds the integer {value}, beyond 2**53, where float64 cannot hold every "
                        "integer; write it as a float "
                        f"if rounding is acceptable"
                    )
    return values


def _from_frame(frame: Any, pandas: Any) -> Found:
    columns = []
    for place, (label, dtype) in enumerate(frame.dtypes.items()):
        column = frame.iloc[:, place]
        missing = column.isna().to_numpy()
        if missing.any():
            row = int(missing.argmax())
            raise InputError(
                f"data frame has a missing value at row {row}, column {place}, counted from 0; every entry "
                "must be a finite number"
            )
        # pandas' own nullable types keep their numbers under a NumPy type of the same width.
        values = column.to_numpy(dtype=getattr(dtype, "numpy_dtype", None))
        if values.dtype.kind not in "biufc":
            raise InputError(
                f"data frame column {one_line(repr(label))} holds {one_line(dtype)}, not numbers; convert it first"
            )
        if (
            values.dtype.kind in "iu"
            and values.size
            and max(abs(int(values.min())), abs(int(values.max()))) > EXACT_INTEGER
        ):
            raise InputError(
                f"data frame column {one_line(repr(label))} holds integers beyond 2**53, which float64 cannot "
                "hold exactly; "
                f"convert it yourself if rounding is acceptable"
            )
        columns.append(values)
    values = np.column_stack(columns) if columns else np.empty((len(frame), 0))
    numbered = list(frame.index) == list(range(len(frame.index)))
    if numbered:
        return Found(values)
    if not frame.index.equals(frame.columns):
        return Found(
            values, notes=("Row index and columns of the data frame differ; neither were kept as state names.",)
        )
    names = [" / ".join(map(str, entry)) if isinstance(entry, tuple) else str(entry) for entry in frame.index]
    return Found(values, labels=tuple(one_line(entry) for entry in names))


def _from_model(source: Any) -> tuple[Found, str]:
    from scipy.sparse import issparse

    kind = one_line(type(source).__name__)
    what = f".A of {kind}"
    values = source.A
    if not issparse(values):
        try:
            values = np.array(values)
        except Exception as error:
            raise InputError(
                f"{what} cannot be turned into an array ({one_line(error)}); give a NumPy array"
            ) from error
    n = values.shape[0] if values.ndim == 2 else 0
    for mass in _MASS_NAMES:
        held = getattr(source, mass, None)
        # A method of that name says nothing about the model.
        if held is not None and not inspect.isroutine(held) and not _is_identity(held, n):
            raise InputError(
                f"{kind} carries {mass}, which is not the identity, so its eigenvalue problem is a generalised one; "
                f"bring the model to the form x' = A x first"
            )
    names = getattr(source, "state_labels", None)
    labels = None
    if isinstance(names, list | tuple) and len(names) == n and all(isinstance(entry, str) and entry for entry in names):
        labels = tuple(one_line(entry) for entry in names)
    return Found(values, labels=labels), what


def _is_identity(mass: Any, n: int) -> bool:
    from scipy import sparse

    if sparse.issparse(mass):
        triples: Any = mass
        return bool(triples.shape == (n, n) and (triples != sparse.eye_array(n, format="csr")).nnz == 0)
    try:
        array = np.array(mass)
        if array.size == 0:
            return True  # models without a mass matrix store an empty one
        return array.shape == (n, n) and bool(np.array_equal(array, np.eye(n)))
    except Exception:
        return False


def _given_name(name: str) -> str:
    if not isinstance(name, str) or not name.strip() or not name.isprintable():
        raise InputError("name is not a line of text; give a short printable name")
    return name.strip()


def _given_labels(labels: Sequence[str] | str | os.PathLike[str], n: int) -> tuple[str, ...]:
    if isinstance(labels, str | os.PathLike):
        entries: list[Any] = list(read_label_file(Path(labels)))
    else:
        try:
            entries = list(labels)
        except TypeError as error:
            raise InputError(
                f"labels is a {type(labels).__name__}; give a list of {n} names or the path of a text file"
            ) from error
    if len(entries) != n:
        raise InputError(f"{len(entries)} labels were given for {n} states; give one name a state")
    for place, entry in enumerate(entries):
        if not isinstance(entry, str) or not entry.strip() or not entry.isprintable():
            raise InputError(
                f"label {place} (counted from 0) is {one_line(repr(entry))[:60]}; every label is one line of "
                "printable text"
            )
    return tuple(str(entry).strip() for entry in entries)
