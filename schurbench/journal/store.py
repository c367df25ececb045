"""A run on disk while it is being made: a directory of chunked arrays (Zarr, version 3) that can be read at any moment.

Everything is appended. What counts is said by a commit, a small text that is written last: two of them take turns, so that
there is always a whole one, and whatever lies beyond its counts is ignored. Zarr puts each file in its place by renaming it
when it is complete, so that a process that is killed leaves no half of one.

Arrays are plain numbers with a checksum a chunk. Nothing else is read: every description of an array is held against what
this module writes before Zarr sees it, so that no other codec is ever asked for.
"""

from __future__ import annotations

import json
import os
import threading
import time
import weakref
from collections.abc import Callable, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from schurbench.errors import InputError
from schurbench.intake import WorkingMatrix
from schurbench.intake.limits import require_memory, require_room
from schurbench.journal.columns import COLUMNS, decode, encode
from schurbench.journal.records import Step, Window
from schurbench.measures import Array
from schurbench.prepare.preparation import Preparation

__all__ = ["RunStore", "is_store", "require_free"]

_MARK = "schurbench_run"
_VERSION = 1

#: Steps that are written at once, and seconds after which fewer are: a commit costs some 10 ms, most of it in Python.
_STEPS_AT_ONCE, _SECONDS = 1024, 1.0

#: Most steps that wait for a disk that does not keep up, before the iteration waits for it.
_MOST_WAITING = 8192

#: Work between checkpoints, in sweeps over the whole matrix: four times that of the journal, because writing a state takes four
#: times as long as copying it (n = 1000, 400 MB/s). Doubled whenever so many have been written,
#: so that a run that goes on and on does not fill the disk at the same pace.
_FIRST_DISTANCE, _BEFORE_DOUBLING = 512, 64

_COMMITS = ("commit_0", "commit_1")

#: Rows of a growing array in one chunk, which is one file.
_ROWS_A_CHUNK = {"bands": 64, "checkpoint_H": 1, "checkpoint_Qh": 1}
_OTHER_ROWS = 1024


@dataclass(frozen=True, slots=True)
class _Layout:
    """What an array must look like."""

    dtype: str
    tail: tuple[int, ...]
    rows: int  # in a chunk
    length: int | None  # None: it grows

    @property
    def fill(self) -> Any:
        """What is read where a chunk is missing; no recorded number is that."""
        return {"int64": -1, "float64": float("nan"), "complex128": complex(float("nan"), float("nan"))}[self.dtype]

    def description(self) -> dict[str, Any]:
        """The part of Zarr's own description that must be just so."""
        return {
            "zarr_format": 3,
            "node_type": "array",
            "data_type": self.dtype,
            "chunk_grid": {"name": "regular", "configuration": {"chunk_shape": [self.rows, *self.tail]}},
            "chunk_key_encoding": {"name": "default", "configuration": {"separator": "/"}},
            "fill_value": {"int64": -1, "float64": "NaN", "complex128": ["NaN", "NaN"]}[self.dtype],
            "storage_transformers": [],
        }


def _layouts(n: int, matrix_type: str, real: bool, accumulate: bool) -> dict[str, _Layout]:
    planes = (n, n) if real else (2, n, n)
    fixed = {"matrix": (matrix_type, (n,), n), "scaling": ("float64", (), n), "permutation": ("int64", (), n)}
    growing = {
        **COLUMNS,
        "bands": ("float64" if real else "complex128", (3, n)),
        "checkpoint_H": ("float64", planes),
        **({"checkpoint_Qh": ("float64", planes)} if accumulate else {}),
    }
    return {
        **{name: _Layout(dtype, tail, length, length) for name, (dtype, tail, length) in fixed.items()},
        **{
            name: _Layout(dtype, tail, _ROWS_A_CHUNK.get(name, _OTHER_ROWS), None)
            for name, (dtype, tail) in growing.items()
        },
    }


def is_store(path: str | Path) -> bool:
    """Whether a directory holds a run."""
    try:
        text = json.loads((Path(path) / "zarr.json").read_text(encoding="utf-8"))
        return _MARK in text["attributes"]
    except (OSError, ValueError, KeyError, TypeError):
        return False


def require_free(path: str | Path) -> Path:
    """Refuse a directory that cannot take a new run; before any work is done.

    Raises
    ------
    InputError
        It holds a run or anything else, is no directory, or Zarr is not installed.
    """
    path = Path(path)
    _zarr()
    if is_store(path):
        raise InputError(f"{path} holds a run already; open it with open_run and go on with resume, or choose another")
    if path.exists() and not path.is_dir():
        raise InputError(f"{path} is a file; give a directory that is empty or not there yet")
    try:
        if path.is_dir() and any(path.iterdir()):
            raise InputError(f"{path} is not empty and holds no run; give a directory that is empty or not there yet")
    except OSError as error:
        raise InputError(f"{path} cannot be read ({error.strerror or error}); choose another place") from None
    return path


class RunStore:
    """The arrays of a run in a directory; read by anyone, appended to by the one who holds it.

    Attributes
    ----------
    path : Path
    about : dict
        What never changes: matrix, preparation.
    head : dict
        What a commit says beside its counts: settings, phases, environment, stop.
    checkpoints : list of int
        States that are kept whole.
    failed : str or None
        Why nothing can be written any more.
    """

    def __init__(self, path: Path, about: dict[str, Any], layouts: dict[str, _Layout], commit: dict[str, Any]) -> None:
        self.path = path
        self.about = about
        self.head: dict[str, Any] = commit["head"]
        self.checkpoints: list[int] = list(commit["checkpoints"])
        self.failed: str | None = None
        self._layouts = layouts
        self._number = int(commit["number"])
        self._counts: dict[str, int] = dict(commit["counts"])
        self._states = self._counts["bands"]  # committed
        self._arrays: dict[str, Any] = {}
        self._read: tuple[int, Array] | None = None
        self._lock = threading.Lock()
        self._release: Any = None
        self._pool: ThreadPoolExecutor | None = None
        self._job: Future[None] | None = None
        self._waiting: list[tuple[Step | None, Window, Array]] = []
        self._told = time.monotonic()
        self._work = 0

    # --- making, opening, holding ---------------------------------------------------------------------------------

    @classmethod
    def create(
        cls,
        path: Path,
        matrix: WorkingMatrix,
        preparation: Preparation,
        start: tuple[Array, Array],
        head: dict[str, Any],
    ) -> RunStore:
        """Begin a store with the state before the first step, and hold it."""
        require_free(path)
        zarr = _zarr()
        accumulate = bool(start[1].shape[-2])
        about: dict[str, Any] = {
            _MARK: _VERSION,
            "matrix": {
                "n": matrix.n,
                "dtype": matrix.array.dtype.name,
                "name": matrix.name,
                "source": matrix.source,
                "labels": list(matrix.labels) if matrix.labels is not None else None,
                "notes": list(matrix.notes),
                "file_sha256": matrix.file_sha256,
                "key": matrix.key,
                "sha256": matrix.sha256,
            },
            "preparation": {
                "exponent": preparation.exponent,
                "form": preparation.form,
                "flip": preparation.flip,
                "isolated": list(preparation.isolated),
                "accumulate": accumulate,
            },
        }
        layouts = _layouts(matrix.n, matrix.array.dtype.name, start[0].ndim == 2, accumulate)
        counts = {name: 0 for name, layout in layouts.items() if layout.length is None}
        store = cls(path, about, layouts, {"number": 0, "counts": counts, "checkpoints": [], "head": head})
        try:
            path.mkdir(parents=True, exist_ok=True)
            store._hold()
            zarr.create_group(store=zarr.storage.LocalStore(path), zarr_format=3)
        except OSError as error:
            store.close()
            raise InputError(f"{path} cannot be written ({error.strerror or error}); choose another place") from None
        store._submit(store._begin, matrix, preparation, start)
        return store

    def _begin(self, matrix: WorkingMatrix, preparation: Preparation, start: tuple[Array, Array]) -> None:
        zarr = _zarr()
        root = zarr.open_group(store=zarr.storage.LocalStore(self.path), mode="r+", zarr_format=3)
        for name in _COMMITS:
            root.create_group(name)
        for name, layout in self._layouts.items():
            self._arrays[name] = root.create_array(
                name,
                shape=(layout.rows if layout.length is None else layout.length, *layout.tail),
                chunks=(layout.rows, *layout.tail),
                dtype=layout.dtype,
                filters=None,
                serializer=zarr.codecs.BytesCodec(endian="little"),
                compressors=[zarr.codecs.Crc32cCodec()],
                fill_value=layout.fill,
            )
        self._arrays["matrix"][:] = matrix.array
        self._arrays["scaling"][:] = preparation.D
        self._arrays["permutation"][:] = preparation.permutation
        self._put_checkpoint(0, start)
        self._commit()
        root.attrs.put(self.about)  # the mark, last of all

    @classmethod
    def open(cls, path: Path) -> RunStore:
        """Open for reading, at the last commit.

        Raises
        ------
        InputError
            It is damaged, of another version, or holds anything that this module does not write.
        """
        _zarr()
        for folder, folders, files in os.walk(path):
            for name in (*folders, *files):
                if (Path(folder) / name).is_symlink():
                    raise InputError(f"{path} holds a link ({name}), which is not followed; copy the store whole")
        about = _attributes(path)
        if about is None or about.get(_MARK) != _VERSION:
            told = None if about is None else about.get(_MARK)
            raise InputError(f"{path} was written in format {told!r}; this version reads format {_VERSION}")
        try:
            n, dtype = int(about["matrix"]["n"]), str(about["matrix"]["dtype"])
            real, accumulate = about["preparation"]["form"] == "real", about["preparation"]["accumulate"] is True
            if n < 1 or dtype not in ("float64", "complex128"):
                raise ValueError("no such matrix")
            require_room(n, is_complex=not real, what=str(path))
            layouts = _layouts(n, dtype, real, accumulate)
            found = [_attributes(path / name) for name in _COMMITS]
            commits = [commit for commit in found if commit is not None and _is_commit(commit, layouts)]
            if not commits:
                raise ValueError("no commit")
            latest = max(commits, key=lambda commit: int(commit["number"]))
            store = cls(path, about, layouts, latest)
            for name in layouts:
                store._arrays[name] = store._checked_array(name, read_only=True)
        except InputError:
            raise
        except (KeyError, TypeError, ValueError, OSError) as error:
            raise _damaged(path, error) from None
        return store

    def hold(self) -> None:
        """Get ready to append; only one at a time may.

        Raises
        ------
        InputError
            Another iteration holds it, or it has gone on since it was opened.
        """
        self._hold()
        newest = RunStore.open(self.path)
        if newest._number != self._number:
            self.close()
            raise InputError(f"{self.path} has gone on since this run was opened; open it again and resume that run")
        for leftover in self.path.rglob("*.partial"):
            leftover.unlink(missing_ok=True)
        for name in _COMMITS:
            if _attributes(self.path / name) is None:
                zarr = _zarr()
                zarr.create_group(store=zarr.storage.LocalStore(self.path), path=name, zarr_format=3, overwrite=True)
        for name, layout in self._layouts.items():
            if layout.length is None:
                self._arrays[name] = self._checked_array(name, read_only=False)

    def _hold(self) -> None:
        try:
            import fcntl
        except ImportError:  # no such locks on this system
            self._release = lambda: None
            return
        handle = os.open(self.path, os.O_RDONLY)
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            os.close(handle)
            raise InputError(
                f"{self.path} is being written by an iteration that is still open; wait for it, or close it first"
            ) from None
        except OSError:  # a file system without locks
            pass
        self._release = weakref.finalize(self, os.close, handle)

    @property
    def held(self) -> bool:
        """Whether this object may append."""
        return self._release is not None and self.failed is None

    @property
    def states(self) -> int:
        """States 0 … states−1 are on disk."""
        return self._states

    # --- reading --------------------------------------------------------------------------------------------------

    def steps(self, test: str) -> tuple[list[Step], list[Window]]:
        """All steps committed, and the windows after each."""
        columns = {name: self._rows(name, 0, self._counts[name]) for name in COLUMNS}
        layout = self._layouts["checkpoint_H"]
        try:
            return decode(columns, n=layout.tail[-1], real=len(layout.tail) == 2, test=test)
        except ValueError as error:
            raise _damaged(self.path, error) from None

    def matrix(self) -> WorkingMatrix:
        """The matrix, held against its hash."""
        told = self.about["matrix"]
        found = WorkingMatrix(
            array=self._rows("matrix", 0, told["n"]),
            name=told["name"],
            source=told["source"],
            labels=tuple(told["labels"]) if told["labels"] is not None else None,
            notes=tuple(told["notes"]),
            file_sha256=told["file_sha256"],
            key=told["key"],
        )
        if found.sha256 != told["sha256"]:
            raise InputError(f"{self.path} is damaged: its matrix does not fit the recorded SHA-256; run it again")
        return found

    def fixed(self, name: str) -> Array:
        """``scaling`` or ``permutation``."""
        length = self._layouts[name].length
        assert length is not None
        return self._rows(name, 0, length)

    def bands(self, k: int) -> Array:
        """Three middle diagonals of H after step k, shape (3, n)."""
        rows = self._layouts["bands"].rows
        first = k - k % rows
        with self._lock:
            held = self._read
        if held is None or not held[0] <= k < held[0] + len(held[1]):
            held = (first, self._rows("bands", first, min(first + rows, self._states)))
            with self._lock:
                self._read = held
        out: Array = held[1][k - held[0]]
        return out

    def checkpoint(self, k: int) -> tuple[Array, Array]:
        """H and Zᴴ after step k, in the kernels' layout; k is one of ``checkpoints``."""
        at = self.checkpoints.index(k)
        H = self._rows("checkpoint_H", at, at + 1)[0]
        if "checkpoint_Qh" in self._layouts:
            return H, self._rows("checkpoint_Qh", at, at + 1)[0]
        return H, np.empty((*H.shape[:-2], 0, H.shape[-1]))

    def _rows(self, name: str, first: int, last: int) -> Array:
        layout = self._layouts[name]
        require_memory(
            (last - first) * int(np.prod(layout.tail)) * np.dtype(layout.dtype).itemsize, what=str(self.path)
        )
        try:
            found = np.ascontiguousarray(self._arrays[name][first:last])
        except Exception as error:  # whatever a damaged chunk leads to
            raise _damaged(self.path, error) from None
        missing = bool((found == -1).all(axis=-1).any() if layout.dtype == "int64" else np.isnan(found).any())
        if len(found) != last - first or missing:
            raise InputError(f"{self.path} is damaged: part of its {name} is missing; run it again")
        return found

    def _checked_array(self, name: str, *, read_only: bool) -> Any:
        zarr = _zarr()
        layout = self._layouts[name]
        text = json.loads((self.path / name / "zarr.json").read_text(encoding="utf-8"))
        codecs = [(codec["name"], codec.get("configuration") or {}) for codec in text["codecs"]]
        if codecs != [("bytes", {"endian": "little"}), ("crc32c", {})]:
            raise InputError(
                f"{self.path} stores its {name} with codecs {', '.join(str(c[0]) for c in codecs)}; only plain numbers "
                "with a checksum (bytes, crc32c) are read"
            )
        for key, wanted in layout.description().items():
            if text.get(key, [] if key == "storage_transformers" else None) != wanted:
                raise InputError(f"{self.path} stores its {name} with another {key.replace('_', ' ')}; run it again")
        shape = text["shape"]
        length = self._counts[name] if layout.length is None else layout.length
        if shape[1:] != list(layout.tail) or not isinstance(shape[0], int) or shape[0] < length:
            raise ValueError(f"{name} is too short")
        return zarr.open_array(
            store=zarr.storage.LocalStore(self.path, read_only=read_only),
            path=name,
            mode="r" if read_only else "r+",
            zarr_format=3,
        )

    # --- appending ------------------------------------------------------------------------------------------------

    def add(self, step: Step | None, window: Window, bands: Array) -> None:
        """One more state; None for the step that leads to the start. ``bands`` must not change any more."""
        self._waiting.append((step, window, bands))
        now = time.monotonic()
        if len(self._waiting) < _STEPS_AT_ONCE and now - self._told < _SECONDS:
            return
        if self._idle or len(self._waiting) >= _MOST_WAITING:
            self._told = now
            self._start(None)

    @property
    def added(self) -> int:
        """States given to the store, whether written yet or not."""
        if self._waiting:
            step = self._waiting[-1][0]
            return 1 if step is None else step.index + 1
        self.settle()
        return self.states

    def wants_checkpoint(self, work: int, n: int) -> bool:
        """Whether the state after so much more work should be kept whole."""
        self._work += work
        distance = _FIRST_DISTANCE << (len(self.checkpoints) // _BEFORE_DOUBLING)
        return self._work >= distance * n and self._idle

    def add_checkpoint(self, k: int, H: Array, Qh: Array) -> None:
        """Keep the state that was added last; the arrays must not change any more."""
        self._work = 0
        self._start((k, H, Qh))

    def flush(self) -> None:
        """Write everything that waits, and wait for it."""
        if self.held and self._waiting:
            self._start(None)
        self.settle()

    def close(self) -> None:
        """Write everything that waits and let others append."""
        self.flush()
        if self._pool is not None:
            self._pool.shutdown()
            self._pool = None
        if self._release is not None:
            self._release()
            self._release = None

    @property
    def _idle(self) -> bool:
        return self._job is None or self._job.done()

    def settle(self) -> None:
        """Wait for what is being written."""
        if self._job is not None:
            self._job.result()

    def _start(self, checkpoint: tuple[int, Array, Array] | None) -> None:
        """Hand everything that waits to the writing thread; files are written while the kernels run."""
        if not self.held:
            return
        self.settle()
        waiting, self._waiting = self._waiting, []
        self._submit(self._write, waiting, checkpoint)

    def _submit(self, work: Callable[..., None], *arguments: Any) -> None:
        def carefully() -> None:
            try:
                if self.failed is None:
                    work(*arguments)
            except OSError as error:
                self.failed = f"{self.path} cannot be written ({error.strerror or error})"
            except Exception as error:  # nothing may be lost without a word, whatever Zarr stumbles over
                self.failed = f"{self.path} cannot be written ({type(error).__name__})"

        if self._pool is None:
            self._pool = ThreadPoolExecutor(1, thread_name_prefix="schurbench-store")
        self._job = self._pool.submit(carefully)

    def _write(
        self, waiting: Sequence[tuple[Step | None, Window, Array]], checkpoint: tuple[int, Array, Array] | None
    ) -> None:
        if waiting:
            taken = [(step, window) for step, window, _ in waiting if step is not None]
            for name, rows in encode([t[0] for t in taken], [t[1] for t in taken]).items():
                self._append(name, rows)
            self._append("bands", np.stack([bands for _, _, bands in waiting]))
        if checkpoint is not None and checkpoint[0] not in self.checkpoints:
            self._put_checkpoint(checkpoint[0], checkpoint[1:])
        self._commit()

    def _append(self, name: str, rows: npt.NDArray[Any]) -> None:
        if not len(rows):
            return
        array, first = self._arrays[name], self._counts[name]
        last = first + len(rows)
        if last > array.shape[0]:
            array.resize((max(last, 2 * array.shape[0]), *array.shape[1:]))
        array[first:last] = rows
        self._counts[name] = last

    def _put_checkpoint(self, k: int, state: tuple[Array, ...]) -> None:
        self._append("checkpoint_H", state[0][None])
        if "checkpoint_Qh" in self._layouts:
            self._append("checkpoint_Qh", state[1][None])
        self.checkpoints.append(k)

    def _commit(self) -> None:
        zarr = _zarr()
        self._number += 1
        group = zarr.open_group(
            store=zarr.storage.LocalStore(self.path), path=_COMMITS[self._number % 2], mode="r+", zarr_format=3
        )
        group.attrs.put(
            {"number": self._number, "counts": self._counts, "checkpoints": self.checkpoints, "head": self.head}
        )
        self._states = self._counts["bands"]


def _zarr() -> Any:
    try:
        import zarr
        import zarr.codecs
        import zarr.storage
    except ImportError:
        raise InputError("a run in a directory needs zarr; install schurbench[store], or leave store out") from None
    return zarr


def _attributes(group: Path) -> dict[str, Any] | None:
    """Attributes of a group, or None where they are not whole."""
    try:
        found = json.loads((group / "zarr.json").read_text(encoding="utf-8"))["attributes"]
    except (OSError, ValueError, KeyError, TypeError):
        return None
    return found if isinstance(found, dict) else None


def _is_commit(text: dict[str, Any], layouts: dict[str, _Layout]) -> bool:
    """Whether a commit is whole and does not contradict itself."""
    if not {"number", "counts", "checkpoints", "head"} <= text.keys():
        return False
    counts, kept = text["counts"], text["checkpoints"]
    growing = {name for name, layout in layouts.items() if layout.length is None}
    return (
        isinstance(text["number"], int)
        and isinstance(text["head"], dict)
        and isinstance(counts, dict)
        and counts.keys() == growing
        and all(isinstance(c, int) and c >= 0 for c in counts.values())
        and counts["steps"] == counts["seconds"] == max(0, counts["bands"] - 1)
        and isinstance(kept, list)
        and len(kept) == counts["checkpoint_H"] == counts.get("checkpoint_Qh", len(kept))
        and all(isinstance(k, int) and 0 <= k <= counts["steps"] for k in kept)
        and 0 in kept
        and len(set(kept)) == len(kept)
    )


def _damaged(path: Path, error: Exception) -> InputError:
    return InputError(f"{path} is damaged ({type(error).__name__}); run it again")
