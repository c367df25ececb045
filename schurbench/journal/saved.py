"""A run in one file: an uncompressed .npz archive of plain arrays, with a JSON text for everything that is not an array.

No pickle is written or accepted, so that opening a file never runs code. Runs in a directory are opened here as well;
`schurbench.journal.store` has their format.
"""

from __future__ import annotations

import json
import zipfile
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from schurbench.errors import InputError
from schurbench.intake import WorkingMatrix
from schurbench.journal.columns import COLUMNS, decode, encode
from schurbench.journal.journal import Journal
from schurbench.journal.records import Settings, Stop, StopReason, Window
from schurbench.journal.store import RunStore, is_store
from schurbench.measures import Array
from schurbench.prepare.preparation import Preparation
from schurbench.saving import write_whole

if TYPE_CHECKING:
    from schurbench.journal.run import Run

__all__ = ["is_run", "open_run", "save_run"]

_MARK = "schurbench_run"
_VERSION = 2

#: Most checkpoints that go into a file; what lies between is rebuilt when someone goes there.
_CHECKPOINTS = 8


def is_run(path: str | Path) -> bool:
    """Whether a file is a saved run, or a directory holds one, judged by content and not by name."""
    if Path(path).is_dir():
        return is_store(path)
    try:
        with zipfile.ZipFile(path) as archive:
            return f"{_MARK}.npy" in archive.namelist()
    except (OSError, zipfile.BadZipFile):
        return False


def save_run(run: Run, path: Path, *, replace: bool) -> Path:
    """Write a run so that the file is either whole or not there; see `Run.save`."""
    final_H, final_Qh = run._final
    journal = run.journal
    text = {
        "version": _VERSION,
        "matrix": {
            "name": run.matrix.name,
            "source": run.matrix.source,
            "labels": list(run.matrix.labels) if run.matrix.labels is not None else None,
            "notes": list(run.matrix.notes),
            "file_sha256": run.matrix.file_sha256,
            "key": run.matrix.key,
            "sha256": run.matrix.sha256,
        },
        "settings": run.settings.to_dict(),
        "stop": {"reason": run.stop.reason, "message": run.stop.message, "window": run.stop.window},
        "phases": run.phases,
        "environment": run.environment,
        "preparation": {
            "exponent": run.preparation.exponent,
            "form": run.preparation.form,
            "flip": run.preparation.flip,
            "isolated": run.preparation.isolated,
        },
    }
    kept = journal.checkpoint_steps
    kept = kept[:: -(-len(kept) // _CHECKPOINTS)]
    whole = [journal.checkpoint(k) for k in kept]
    arrays: dict[str, Any] = {
        _MARK: np.frombuffer(json.dumps(text).encode(), dtype=np.uint8),
        "A": run.matrix.array,
        "D": run.preparation.D,
        "permutation": run.preparation.permutation,
        "H": final_H,
        "Qh": final_Qh,
        "bands": journal.all_bands(),
        "checkpoint_steps": np.array(kept, dtype=np.int64),
        "checkpoint_H": np.stack([H for H, _ in whole]),
        "checkpoint_Qh": np.stack([Qh for _, Qh in whole]),
        **encode(journal.steps, journal.windows[1:]),
    }
    return write_whole(path, lambda stream: np.savez(stream, **arrays), replace=replace)


def open_run(path: str | Path) -> Run:
    """Reopen a run that was saved with `Run.save`, or one in a directory that was made with ``store=``.

    Parameters
    ----------
    path : str or Path
        The file, recognised by its content, whatever its name; or the directory, also while the run is still going on or
        after it was killed.

    Returns
    -------
    Run
        With the same bytes in every state as the run that was saved. A run that was killed ends with its last recorded
        step, as cancelled; `Run.resume` goes on from there.

    Raises
    ------
    InputError
        It is missing, is no run, is damaged, or holds a matrix that does not fit its recorded hash.
    """
    path = Path(path)
    if not path.exists():
        raise InputError(f"{path} does not exist; check the name")
    if not is_run(path):
        what = "holds no run" if path.is_dir() else "is not a saved run"
        raise InputError(
            f"{path} {what}; give a file written by 'schurbench run' or Run.save, or a directory made with store="
        )
    try:
        return _from_store(path) if path.is_dir() else _from_file(path)
    except InputError:
        raise
    except (KeyError, TypeError, ValueError, IndexError, OSError, EOFError, zipfile.BadZipFile) as error:
        remedy = "run it again" if path.is_dir() else "save the run again"
        raise InputError(f"{path} is damaged ({type(error).__name__}); {remedy}") from None


def _from_file(path: Path) -> Run:
    from schurbench.journal.run import Run

    with np.load(path, allow_pickle=False) as archive:
        arrays = {key: archive[key] for key in archive.files}
    text = json.loads(arrays[_MARK].tobytes())
    if text["version"] != _VERSION:
        raise InputError(f"{path} was written in format {text['version']}; this version reads format {_VERSION}")
    about = text["matrix"]
    matrix = WorkingMatrix(
        array=arrays["A"],
        name=about["name"],
        source=about["source"],
        labels=tuple(about["labels"]) if about["labels"] is not None else None,
        notes=tuple(about["notes"]),
        file_sha256=about["file_sha256"],
        key=about["key"],
    )
    if matrix.sha256 != about["sha256"]:
        raise InputError(f"{path} is damaged: its matrix does not fit the recorded SHA-256; save the run again")
    settings = Settings(**text["settings"])
    n, real = matrix.n, settings.form == "real"
    planes, rows = (() if real else (2,)), (n if settings.accumulate else 0)
    for name in ("H", "checkpoint_H"):
        if arrays[name].dtype != np.float64 or arrays[name].shape[-2 - len(planes) :] != (*planes, n, n):
            raise ValueError("H of another shape")
    for name in ("Qh", "checkpoint_Qh"):
        if arrays[name].dtype != np.float64 or arrays[name].shape[-2 - len(planes) :] != (*planes, rows, n):
            raise ValueError("Z of another shape")
    steps, windows = decode({name: arrays[name] for name in COLUMNS}, n=n, real=real, test=settings.deflation)
    checkpoints = {
        int(k): (H, Qh)
        for k, H, Qh in zip(arrays["checkpoint_steps"], arrays["checkpoint_H"], arrays["checkpoint_Qh"], strict=True)
    }
    if 0 not in checkpoints or not all(0 <= k <= len(steps) for k in checkpoints):
        raise ValueError("checkpoints that fit no step")
    bands = arrays["bands"]
    if bands.shape[1:] != (3, n) or len(bands) > len(steps) + 1:
        raise ValueError("bands of another shape")
    journal = Journal.from_parts(steps, [(0, n), *windows], checkpoints, bands, settings.keep)
    return Run(
        matrix,
        settings,
        _preparation(text["preparation"], checkpoints[0], arrays["D"], arrays["permutation"]),
        journal,
        _stop(text["stop"]),
        text["phases"],
        text["environment"],
        (arrays["H"], arrays["Qh"]),
    )


def _from_store(path: Path) -> Run:
    from schurbench.journal.run import Run

    store = RunStore.open(path)
    matrix = store.matrix()
    settings = Settings(**store.head["settings"])
    steps, windows = store.steps(settings.deflation)
    journal = Journal.from_store(store, steps, [(0, matrix.n), *windows], settings.keep)
    iterated = sum(step.seconds for step in steps)
    return Run(
        matrix,
        settings,
        _preparation(
            store.about["preparation"], journal.checkpoints[0], store.fixed("scaling"), store.fixed("permutation")
        ),
        journal,
        _stop(store.head["stop"]) if store.head["stop"] is not None else _broken_off(journal),
        {**store.head["phases"], "iterate": iterated} if store.head["stop"] is None else store.head["phases"],
        store.head["environment"],
        journal.rebuild(len(steps)),
    )


def _broken_off(journal: Journal) -> Stop:
    sweeps = sum(1 for step in journal.steps if step.shifts)
    lo, hi = journal.windows[-1]
    if hi == 0:
        return Stop(StopReason.CONVERGED, f"converged after {sweeps} sweeps", (0, 0))
    return Stop(
        StopReason.CANCELLED,
        f"broken off after {sweeps} recorded sweeps with rows {lo} to {hi - 1} unfinished; resume goes on from there",
        (lo, hi),
    )


def _preparation(
    about: dict[str, Any], start: tuple[Array, Array], D: npt.NDArray[Any], permutation: npt.NDArray[Any]
) -> Preparation:
    from schurbench.kernels import join

    H, Qh = map(join, start)
    lo, hi = about["isolated"]
    return Preparation(
        H=H,
        Qh=Qh,
        D=D,
        exponent=int(about["exponent"]),
        form=about["form"],
        flip=bool(about["flip"]),
        permutation=permutation,
        isolated=(int(lo), int(hi)),
    )


def _stop(text: dict[str, Any]) -> Stop:
    lo, hi = text["window"]
    window: Window = (int(lo), int(hi))
    return Stop(StopReason(text["reason"]), text["message"], window)
