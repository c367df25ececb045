"""A run on disk: one uncompressed .npz archive of plain arrays, with a JSON text for everything that is not an array.

No pickle is written or accepted, so that opening a file never runs code.
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
from schurbench.journal.journal import Journal
from schurbench.journal.records import (
    SPIKE,
    Deflation,
    DeflationKind,
    Settings,
    Step,
    StepKind,
    Stop,
    StopReason,
)
from schurbench.prepare.preparation import Preparation
from schurbench.saving import write_whole

if TYPE_CHECKING:
    from schurbench.journal.run import Run

__all__ = ["is_run", "open_run", "save_run"]

_MARK = "schurbench_run"
_VERSION = 1

#: Most checkpoints that go into a file; what lies between is rebuilt when someone goes there.
_CHECKPOINTS = 8

_STEP_KINDS = list(StepKind)
_DEFLATION_KINDS = list(DeflationKind)


def is_run(path: str | Path) -> bool:
    """Whether the file is a saved run, judged by its content and not by its name."""
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
    kept = sorted(journal.checkpoints)
    kept = kept[:: -(-len(kept) // _CHECKPOINTS)]
    arrays: dict[str, Any] = {
        _MARK: np.frombuffer(json.dumps(text).encode(), dtype=np.uint8),
        "A": run.matrix.array,
        "D": run.preparation.D,
        "permutation": run.preparation.permutation,
        "H": final_H,
        "Qh": final_Qh,
        "windows": np.array(journal.windows, dtype=np.int64),
        "bands": journal.all_bands(),
        "checkpoint_steps": np.array(kept, dtype=np.int64),
        "checkpoint_H": np.stack([journal.checkpoints[k][0] for k in kept]),
        "checkpoint_Qh": np.stack([journal.checkpoints[k][1] for k in kept]),
        **_columns(journal.steps),
    }
    return write_whole(path, lambda stream: np.savez(stream, **arrays), replace=replace)


def open_run(path: str | Path) -> Run:
    """Reopen a run that was saved with `Run.save`.

    Parameters
    ----------
    path : str or Path
        The file; recognised by its content, whatever its name.

    Returns
    -------
    Run
        With the same bytes in every state as the run that was saved.

    Raises
    ------
    InputError
        The file is missing, is not a saved run, is damaged, or holds a matrix that does not fit its recorded hash.
    """
    from schurbench.journal.run import Run

    path = Path(path)
    if not path.exists():
        raise InputError(f"{path} does not exist; check the name")
    if not is_run(path):
        raise InputError(f"{path} is not a saved run; give a file written by 'schurbench run' or Run.save")
    try:
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
        checkpoints = {
            int(k): (H, Qh)
            for k, H, Qh in zip(
                arrays["checkpoint_steps"], arrays["checkpoint_H"], arrays["checkpoint_Qh"], strict=True
            )
        }
        windows = [(int(lo), int(hi)) for lo, hi in arrays["windows"]]
        journal = Journal.from_parts(
            _steps(arrays, settings.deflation), windows, checkpoints, arrays["bands"], settings.keep
        )
        if len(windows) != len(journal.steps) + 1 or 0 not in checkpoints:
            raise InputError(f"{path} is damaged: its steps and windows do not match; save the run again")
        from schurbench.kernels import join

        start_H, start_Qh = map(join, checkpoints[0])
        about = text["preparation"]
        preparation = Preparation(
            H=start_H,
            Qh=start_Qh,
            D=arrays["D"],
            exponent=int(about["exponent"]),
            form=about["form"],
            flip=bool(about["flip"]),
            permutation=arrays["permutation"],
            isolated=(int(about["isolated"][0]), int(about["isolated"][1])),
        )
        stop = Stop(
            StopReason(text["stop"]["reason"]),
            text["stop"]["message"],
            (int(text["stop"]["window"][0]), int(text["stop"]["window"][1])),
        )
        return Run(
            matrix,
            settings,
            preparation,
            journal,
            stop,
            text["phases"],
            text["environment"],
            (arrays["H"], arrays["Qh"]),
        )
    except InputError:
        raise
    except (KeyError, TypeError, ValueError, IndexError, OSError, EOFError, zipfile.BadZipFile) as error:
        raise InputError(f"{path} is damaged ({type(error).__name__}); save the run again") from None


def _columns(steps: list[Step]) -> dict[str, npt.NDArray[Any]]:
    """Steps and deflations as plain columns."""
    deflations = [d for step in steps for d in step.deflations]
    shifts = [s for step in steps for s in step.shifts]
    values = [v for d in deflations for v in d.eigenvalues]
    spikes = [v for step in steps for v in step.spikes]
    handed_on = [v for step in steps for v in step.handed_on]
    return {
        "step_kind": np.array([_STEP_KINDS.index(s.kind) for s in steps], dtype=np.int64),
        "step_window": np.array([s.window for s in steps], dtype=np.int64).reshape(-1, 2),
        "step_shifts": np.array([len(s.shifts) for s in steps], dtype=np.int64),
        "step_exceptional": np.array([s.exceptional for s in steps], dtype=np.bool_),
        "step_rotations": np.array([s.rotations for s in steps], dtype=np.int64),
        "step_seconds": np.array([s.seconds for s in steps], dtype=np.float64),
        "step_rows": np.array([s.rows for s in steps], dtype=np.int64),
        "step_spikes": np.array([len(s.spikes) for s in steps], dtype=np.int64),
        "step_handed_on": np.array([len(s.handed_on) for s in steps], dtype=np.int64),
        "shifts": np.array(shifts, dtype=np.complex128),
        "spikes": np.array(spikes, dtype=np.float64),
        "handed_on": np.array(handed_on, dtype=np.complex128),
        "deflation_step": np.array([d.step for d in deflations], dtype=np.int64),
        "deflation_row": np.array([d.row for d in deflations], dtype=np.int64),
        "deflation_size": np.array([d.size for d in deflations], dtype=np.int64),
        "deflation_kind": np.array([_DEFLATION_KINDS.index(d.kind) for d in deflations], dtype=np.int64),
        "deflation_magnitude": np.array([d.magnitude for d in deflations], dtype=np.float64),
        "deflation_threshold": np.array([d.threshold for d in deflations], dtype=np.float64),
        "deflation_spike": np.array([d.test == SPIKE for d in deflations], dtype=np.bool_),
        "deflation_before": np.array([d.before_sweep for d in deflations], dtype=np.bool_),
        "deflation_values": np.array([len(d.eigenvalues) for d in deflations], dtype=np.int64),
        "eigenvalues": np.array(values, dtype=np.complex128),
    }


def _steps(arrays: dict[str, npt.NDArray[Any]], test: str) -> list[Step]:
    by_step: dict[int, list[Deflation]] = {}
    at = 0
    for i, index in enumerate(arrays["deflation_step"].tolist()):
        count = int(arrays["deflation_values"][i])
        by_step.setdefault(index, []).append(
            Deflation(
                step=index,
                row=int(arrays["deflation_row"][i]),
                size=int(arrays["deflation_size"][i]),
                kind=_DEFLATION_KINDS[int(arrays["deflation_kind"][i])],
                test=SPIKE if arrays["deflation_spike"][i] else test,
                magnitude=float(arrays["deflation_magnitude"][i]),
                threshold=float(arrays["deflation_threshold"][i]),
                eigenvalues=tuple(arrays["eigenvalues"][at : at + count].tolist()),
                before_sweep=bool(arrays["deflation_before"][i]),
            )
        )
        at += count
    steps = []
    at = at_spike = at_handed = 0
    for i, kind in enumerate(arrays["step_kind"].tolist()):
        count = int(arrays["step_shifts"][i])
        spikes, handed = int(arrays["step_spikes"][i]), int(arrays["step_handed_on"][i])
        lo, hi = arrays["step_window"][i].tolist()
        steps.append(
            Step(
                index=i + 1,
                window=(lo, hi),
                kind=_STEP_KINDS[kind],
                shifts=tuple(arrays["shifts"][at : at + count].tolist()),
                exceptional=bool(arrays["step_exceptional"][i]),
                rotations=int(arrays["step_rotations"][i]),
                seconds=float(arrays["step_seconds"][i]),
                deflations=tuple(by_step.get(i + 1, ())),
                rows=int(arrays["step_rows"][i]),
                spikes=tuple(arrays["spikes"][at_spike : at_spike + spikes].tolist()),
                handed_on=tuple(arrays["handed_on"][at_handed : at_handed + handed].tolist()),
            )
        )
        at, at_spike, at_handed = at + count, at_spike + spikes, at_handed + handed
    return steps
