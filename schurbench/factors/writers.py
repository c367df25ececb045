"""Factors to files, and back: ``.mat``, ``.npz``, ``.h5``, ``.mtx``, each with a manifest beside."""

from __future__ import annotations

import hashlib
import json
import os
import tempfile
from collections.abc import Callable, Mapping
from contextlib import suppress
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from schurbench.errors import InputError
from schurbench.factors.triangular import Array
from schurbench.prepare.plain import plain

if TYPE_CHECKING:
    from schurbench.factors.core import Factors

__all__ = ["FORMATS", "MANIFEST_KIND", "MANIFEST_VERSION", "file_sha256", "paths_of", "read_factor", "save_factors"]

MANIFEST_SUFFIX = ".manifest.json"
MANIFEST_KIND = "schurbench factors"
MANIFEST_VERSION = 1

#: A variable of a MATLAB version 5 file holds less than 2³¹ bytes (MAT-File Format, The MathWorks).
_LARGEST_MAT_VARIABLE = 2**31


@dataclass(frozen=True, slots=True)
class Format:
    """One way to lay factors down in files.

    Attributes
    ----------
    parts : dict
        Text put between stem and suffix of each file, and the factors that file holds.
    write : callable
        ``write(path, {"T": ..., "Z": ...})`` with the factors of that file.
    """

    parts: Mapping[str, tuple[str, ...]]
    write: Callable[[Path, dict[str, Array]], None]


def _write_mat(path: Path, arrays: dict[str, Array]) -> None:
    from scipy.io import savemat

    largest = max(array.nbytes for array in arrays.values())
    if largest >= _LARGEST_MAT_VARIABLE:
        raise InputError(f"a factor takes {largest} bytes and a .mat variable less than 2^31; save as .h5 or .npz")
    savemat(str(path), arrays, appendmat=False)


def _write_npz(path: Path, arrays: dict[str, Array]) -> None:
    with path.open("wb") as stream:
        np.savez(stream, **arrays)  # type: ignore[arg-type]  # its stub takes every keyword for allow_pickle


def _write_h5(path: Path, arrays: dict[str, Array]) -> None:
    h5py = _h5py(path)
    with h5py.File(path, "w") as file:
        for name, array in arrays.items():
            file.create_dataset(name, data=array)


def _write_mtx(path: Path, arrays: dict[str, Array]) -> None:
    from scipy.io import mmwrite

    (array,) = arrays.values()
    # 17 significant digits bring every double back bit for bit (IEEE 754-2019, section 5.12.2).
    with path.open("wb") as stream:
        mmwrite(stream, array, precision=17, symmetry="general")


_ONE_FILE = {"": ("T", "Z")}

FORMATS: dict[str, Format] = {
    ".mat": Format(_ONE_FILE, _write_mat),
    ".npz": Format(_ONE_FILE, _write_npz),
    ".h5": Format(_ONE_FILE, _write_h5),
    ".mtx": Format({"_T": ("T",), "_Z": ("Z",)}, _write_mtx),
}


def paths_of(path: Path) -> tuple[Path, ...]:
    """Every file that saving factors as `path` writes, the manifest last.

    Raises
    ------
    InputError
        Unknown suffix.
    """
    parts = _format_of(path).parts
    return (
        *(path.with_name(f"{path.stem}{part}{path.suffix}") for part in parts),
        path.with_name(path.name + MANIFEST_SUFFIX),
    )


def _format_of(path: Path) -> Format:
    layout = FORMATS.get(path.suffix.lower())
    if layout is None:
        raise InputError(f"factors cannot be saved as {path.name!r}; end the name in one of {', '.join(FORMATS)}")
    return layout


def save_factors(factors: Factors, path: Path, replace: bool = False) -> tuple[Path, ...]:
    """Write the factors and their manifest; see `Factors.save`.

    Notes
    -----
    Everything is first written under temporary names in the same folder, and takes its name only when all of it is on
    disk. Without `replace` a name that another program takes in the meantime is not overwritten either.
    """
    layout = _format_of(path)
    folder = path.parent
    if not folder.is_dir():
        raise InputError(f"there is no folder {str(folder)!r} to save in; create it first")
    *places, manifest = paths_of(path)
    targets = dict(zip(places, layout.parts.values(), strict=True))
    taken = [target.name for target in [*targets, manifest] if target.exists()]
    if taken and not replace:
        raise InputError(f"{', '.join(taken)} exists already; choose another name, or overwrite with replace=True")

    written: list[tuple[Path, Path]] = []
    with tempfile.TemporaryDirectory(prefix=".saving-", dir=folder) as room:
        files: list[dict[str, Any]] = []
        for target, names in targets.items():
            fresh = Path(room) / target.name
            layout.write(fresh, {name: getattr(factors, name) for name in names})
            _flush(fresh)
            files.append(
                {
                    "name": target.name,
                    "holds": list(names),
                    "bytes": fresh.stat().st_size,
                    "sha256": file_sha256(fresh),
                }
            )
            written.append((fresh, target))
        fresh = Path(room) / manifest.name
        text = json.dumps(manifest_of(factors, files), indent=1, allow_nan=False, ensure_ascii=False)
        fresh.write_text(text + "\n", encoding="utf-8")
        _flush(fresh)
        written.append((fresh, manifest))
        _publish(written, replace)
    return tuple(target for _, target in written)


def manifest_of(factors: Factors, files: list[dict[str, Any]]) -> dict[str, Any]:
    """What a manifest says, JSON-ready."""
    matrix = factors.matrix
    origin = Path(matrix.source)
    with suppress(OSError, ValueError):
        origin = origin.resolve() if matrix.file_sha256 is not None and origin.is_file() else origin
    content: dict[str, Any] = {
        "kind": MANIFEST_KIND,
        "version": MANIFEST_VERSION,
        "written": datetime.now(UTC).isoformat(timespec="seconds"),
        "input": {
            "name": matrix.name,
            "source": str(origin) if matrix.file_sha256 is not None else matrix.source,
            "key": matrix.key,
            "n": matrix.n,
            "dtype": matrix.array.dtype.name,
            "sha256": matrix.sha256,
            "file_sha256": matrix.file_sha256,
            "notes": list(matrix.notes),
        },
        "settings": plain(factors.settings.to_dict()),
        "environment": plain(factors.environment),
        "form": factors.form,
        "complete": factors.complete,
        "unfinished": plain(factors.unfinished),
        "selection": factors.selection,
        "refused": [[plain(swap.selected), plain(swap.blocker)] for swap in factors.refused],
        "notes": list(factors.notes),
        "eigenvalue_count": int(np.count_nonzero(np.isfinite(factors.eigenvalues))),
        "eigenvalues": plain(factors.eigenvalues),
        "certificate": factors.certificate().summary(),
        "files": files,
    }
    if factors.scaled is not None:
        content["scaled"] = {"D": plain(factors.scaled.D), "eigenvalues": plain(factors.scaled.eigenvalues)}
    return content


def read_factor(path: Path, name: str) -> Array:
    """One factor from a file that `save_factors` wrote.

    Raises
    ------
    InputError
        Unreadable, damaged, or without an array of that name.
    """
    if path.suffix.lower() == ".h5":
        return _read_h5(path, name)
    from schurbench.intake import load

    return load(path, key=None if path.suffix.lower() == ".mtx" else name).array


def _read_h5(path: Path, name: str) -> Array:
    h5py = _h5py(path)
    try:
        with h5py.File(path, "r") as file:
            # Only a plain array inside this very file is read: no link, no data elsewhere, no filter.
            if not isinstance(file.get(name, getlink=True), h5py.HardLink):
                raise InputError(f"{path.name} holds no array {name} of its own; save the factors again")
            dataset = file[name]
            if not isinstance(dataset, h5py.Dataset) or dataset.external or dataset.is_virtual or dataset.chunks:
                raise InputError(f"{name} in {path.name} is not a plain array; save the factors again")
            expanded = dataset.size * dataset.dtype.itemsize
            if dataset.dtype not in (np.float64, np.complex128) or expanded > path.stat().st_size:
                raise InputError(f"{name} in {path.name} is not stored as saved factors are; save the factors again")
            array: Array = dataset[()]
            return array
    except InputError:
        raise
    except (OSError, RuntimeError, ValueError, KeyError) as error:
        reason = " ".join(str(error).split())
        raise InputError(f"{path.name} cannot be read as HDF5 ({reason}); save the factors again") from error


def file_sha256(path: Path) -> str:
    """SHA-256 of a file's bytes."""
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def _h5py(path: Path) -> Any:
    try:
        import h5py
    except ImportError:
        raise InputError(f"{path.name} needs h5py; install schurbench[formats], or use .npz or .mat") from None
    return h5py


def _flush(path: Path) -> None:
    with path.open("rb+") as stream:
        os.fsync(stream.fileno())


def _publish(written: list[tuple[Path, Path]], replace: bool) -> None:
    """Give every finished file its name; the manifest last, so that it never speaks of files not yet there."""
    published: list[Path] = []
    for fresh, target in written:
        if replace:
            fresh.replace(target)
            continue
        try:
            try:
                os.link(fresh, target)  # fails where the name is taken, in one step
            except FileExistsError:
                raise
            except OSError:  # no hard links on this file system
                with target.open("xb"):
                    fresh.replace(target)
        except FileExistsError:
            for ours in published:
                ours.unlink()
            raise InputError(f"{target.name} appeared while saving and was left alone; choose another name") from None
        published.append(target)
