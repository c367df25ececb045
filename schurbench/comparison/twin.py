"""The same job twice, in two fresh processes under different conditions: does it come out differently?"""

from __future__ import annotations

import json
import os
import platform
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from schurbench.errors import InputError, SchurbenchError, SettingsError
from schurbench.intake import WorkingMatrix, load
from schurbench.matching import pair_spectra
from schurbench.measures import ULP
from schurbench.prepare.plain import number, plain

__all__ = ["OTHER_MACHINE", "Twin", "TwinJob", "twin"]

#: An early kernel of each processor family, without the wide vectors and fused operations of later ones; the names are
#: OpenBLAS's own (TargetList.txt).
_OLD_KERNELS = {"x86_64": "Nehalem", "amd64": "Nehalem", "aarch64": "ARMV8", "arm64": "ARMV8"}

#: Conditions of the second job: kernels compiled for the plainest processor of the family, an early BLAS kernel, and
#: two BLAS threads. What stays the same are the library versions.
OTHER_MACHINE = {
    "NUMBA_CPU_NAME": "generic",
    "OPENBLAS_CORETYPE": _OLD_KERNELS.get(platform.machine().lower(), ""),
    "OPENBLAS_NUM_THREADS": "2",
}

_THIS_MACHINE = {"OPENBLAS_NUM_THREADS": "1"}

_POLL = 0.05


@dataclass(frozen=True, slots=True)
class TwinJob:
    """One of the two jobs.

    Attributes
    ----------
    conditions : dict
        Environment variables it was started with.
    environment : dict
        What its process reported: versions, BLAS kernels, threads, processor.
    converged : bool
    stop : str
    sweeps : int
    seconds : float
    """

    conditions: Mapping[str, str]
    environment: Mapping[str, Any]
    converged: bool
    stop: str
    sweeps: int
    seconds: float


@dataclass(frozen=True, slots=True, eq=False)
class Twin:
    """How the two jobs compare.

    Attributes
    ----------
    matrix : WorkingMatrix
    first, second : TwinJob
        Under this machine's conditions, and under the other ones.
    same_T, same_Z : bool
        Whether the factors agree byte for byte.
    parted_values : int or None
        First state (0 is the Hessenberg start) whose middle three diagonals differ in any bit; None if none does.
    parted_decisions : int or None
        First step with another window, kind of sweep or deflation; None if none has.
    eigenvalues : (n,) ndarray of complex128
        Of the first job, in T order; NaN where not found.
    distance : (n,) ndarray of float64
        From each of them to its partner in the second job; NaN where either run is unfinished.
    condition : (n,) ndarray of float64
        Condition numbers from the first job.
    movement : (n,) ndarray of float64
        How far one unit of rounding moves each, ulp · ‖A‖_F · condition.
    """

    matrix: WorkingMatrix
    first: TwinJob
    second: TwinJob
    same_T: bool
    same_Z: bool
    parted_values: int | None
    parted_decisions: int | None
    eigenvalues: npt.NDArray[np.complex128]
    distance: npt.NDArray[np.float64]
    condition: npt.NDArray[np.float64]
    movement: npt.NDArray[np.float64]

    @property
    def same(self) -> bool:
        """Whether T and Z agree byte for byte."""
        return self.same_T and self.same_Z

    @property
    def sentence(self) -> str:
        """The answer in words."""
        if self.same:
            return "Both jobs gave the same bytes: T and Z do not depend on what was changed between them."
        text = f"T and Z differ. The journals part at {_place(self.parted_values)}"
        text += (
            ", and no step decided differently"
            if self.parted_decisions is None
            else f", and the first different decision is at {_place(self.parted_decisions)}"
        )
        known = np.isfinite(self.distance)
        if not known.any():
            return text + "; eigenvalues cannot be compared, because a run is unfinished."
        worst = int(np.argmax(np.where(known, self.distance, -1.0)))
        text += (
            f". The largest distance between matched eigenvalues is {number(self.distance[worst])}, at an eigenvalue "
            f"of condition number {number(self.condition[worst])} that one unit of rounding moves by "
            f"{number(self.movement[worst])}"
        )
        beyond = self.distance > len(self.distance) * self.movement
        if (beyond & known).any():
            far = int((beyond & known).sum())
            return text + f"; {far} moved further than n units of rounding explain, so look for a cluster there."
        return text + "; every difference is within n units of rounding, so neither result is wrong."

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready."""
        jobs = [
            {name: getattr(job, name) for name in TwinJob.__dataclass_fields__} for job in (self.first, self.second)
        ]
        content: dict[str, Any] = plain(
            {
                "matrix": {"name": self.matrix.name, "n": self.matrix.n, "sha256": self.matrix.sha256},
                "jobs": jobs,
                "same": self.same,
                "same_T": self.same_T,
                "same_Z": self.same_Z,
                "parted_values": self.parted_values,
                "parted_decisions": self.parted_decisions,
                "eigenvalues": self.eigenvalues,
                "distance": self.distance,
                "condition": self.condition,
                "movement": self.movement,
                "sentence": self.sentence,
            }
        )
        return content


def twin(
    matrix: Any,
    conditions: Mapping[str, str] | None = None,
    cancel: threading.Event | None = None,
    **settings: Any,
) -> Twin:
    """Does this job come out differently on another machine?

    Parameters
    ----------
    matrix : WorkingMatrix, or anything `schurbench.load` accepts
    conditions : dict, optional
        Environment variables of the second job; `OTHER_MACHINE` by default.
    cancel : threading.Event, optional
        When set, both jobs are ended and the call raises.
    **settings
        Keywords of `schurbench.iterate` that JSON can carry; strategies by name.

    Returns
    -------
    Twin

    Raises
    ------
    InputError, SettingsError
        As from `schurbench.iterate`.
    SchurbenchError
        A job could not be finished, or was cancelled.

    Notes
    -----
    The first call compiles the kernels for the other processor, which takes up to a minute; later ones find them in
    the cache.
    """
    m = load(matrix)
    job = json.dumps({"name": m.name, "settings": _portable(settings)})
    changed = {name: value for name, value in (OTHER_MACHINE if conditions is None else conditions).items() if value}
    if settings.get("accumulate") is False:
        raise SettingsError("two jobs are compared by their factors; leave out accumulate=False")
    with tempfile.TemporaryDirectory(prefix="schurbench-twin-") as room:
        folders = [Path(room) / "first", Path(room) / "second"]
        for folder in folders:
            folder.mkdir()
            np.save(folder / "matrix.npy", m.array)
            (folder / "job.json").write_text(job, encoding="utf-8")
        _run_jobs(folders, [_THIS_MACHINE, changed], cancel)
        reports = [json.loads((folder / "report.json").read_text(encoding="utf-8")) for folder in folders]
        factors = []
        for folder in folders:
            with np.load(folder / "factors.npz", allow_pickle=False) as archive:
                factors.append({name: archive[name] for name in ("T", "Z", "eigenvalues", "condition")})
    return _confront(m, [_THIS_MACHINE, changed], reports, factors)


def _portable(settings: Mapping[str, Any]) -> dict[str, Any]:
    out = dict(settings)
    if out.get("shifts") is not None:
        out["shifts"] = [[complex(value).real, complex(value).imag] for value in out["shifts"]]
    try:
        json.dumps(out, allow_nan=False)
    except (TypeError, ValueError):
        raise SettingsError(
            "two fresh processes can only be given settings made of names and numbers; name a strategy of the package"
        ) from None
    return out


def _run_jobs(folders: list[Path], conditions: list[Mapping[str, str]], cancel: threading.Event | None) -> None:
    jobs: list[subprocess.Popen[bytes]] = []
    try:
        for folder, extra in zip(folders, conditions, strict=True):
            with (folder / "stderr.txt").open("wb") as complaints:
                jobs.append(
                    subprocess.Popen(
                        [sys.executable, "-m", "schurbench.comparison._twin_job", str(folder)],
                        env={**os.environ, **extra},
                        stdin=subprocess.DEVNULL,
                        stdout=subprocess.DEVNULL,
                        stderr=complaints,
                    )
                )
        while any(job.poll() is None for job in jobs):
            if cancel is not None and cancel.is_set():
                raise SchurbenchError("cancelled before both jobs had ended; there is nothing to compare")
            time.sleep(_POLL)
    finally:
        for job in jobs:
            if job.poll() is None:
                job.kill()
            job.wait()
    for folder, process in zip(folders, jobs, strict=True):
        report = folder / "report.json"
        if report.is_file():
            error = json.loads(report.read_text(encoding="utf-8"))["error"]
            if error is not None:
                raise InputError(error)
        if process.returncode != 0 or not report.is_file():
            lines = (folder / "stderr.txt").read_text(encoding="utf-8", errors="replace").strip().splitlines()
            last = lines[-1] if lines else f"exit code {process.returncode}"
            raise SchurbenchError(f"one of the two jobs could not be finished ({last}); try other conditions")


def _confront(
    m: WorkingMatrix,
    conditions: list[Mapping[str, str]],
    reports: list[dict[str, Any]],
    factors: list[dict[str, npt.NDArray[Any]]],
) -> Twin:
    one, two = factors
    values = [pair["eigenvalues"] for pair in factors]
    distance = np.full(m.n, np.nan)
    if all(np.isfinite(spectrum).all() for spectrum in values):
        distance = pair_spectra(values[0], values[1])[1]
    with np.errstate(over="ignore"):
        movement = ULP * float(np.linalg.norm(one["T"])) * one["condition"]
    jobs = [
        TwinJob(
            conditions=dict(extra),
            environment=report["environment"],
            converged=report["converged"],
            stop=report["stop"],
            sweeps=report["sweeps"],
            seconds=report["seconds"],
        )
        for extra, report in zip(conditions, reports, strict=True)
    ]
    for array in (values[0], distance, one["condition"], movement):
        array.setflags(write=False)
    return Twin(
        matrix=m,
        first=jobs[0],
        second=jobs[1],
        same_T=one["T"].tobytes() == two["T"].tobytes(),
        same_Z=one["Z"].tobytes() == two["Z"].tobytes(),
        parted_values=_first_difference(reports[0]["values"], reports[1]["values"]),
        parted_decisions=_first_difference(reports[0]["decisions"], reports[1]["decisions"]),
        eigenvalues=values[0],
        distance=distance,
        condition=one["condition"],
        movement=movement,
    )


def _first_difference(first: list[Any], second: list[Any]) -> int | None:
    for k, (a, b) in enumerate(zip(first, second, strict=False)):
        if a != b:
            return k
    return None if len(first) == len(second) else min(len(first), len(second))


def _place(step: int | None) -> str:
    if step is None:
        return "no recorded state (the difference lies outside the middle diagonals)"
    return "the Hessenberg start" if step == 0 else f"step {step}"
