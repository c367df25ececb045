"""A finished or stopped run: what was done, what it led to, and any state on the way."""

from __future__ import annotations

import threading
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from schurbench.errors import SettingsError
from schurbench.intake import WorkingMatrix
from schurbench.journal.journal import Journal
from schurbench.journal.records import (
    Deflation,
    Progress,
    Rotation,
    Settings,
    State,
    Step,
    Stop,
    StopReason,
    Window,
)
from schurbench.journal.rotations import Rotations
from schurbench.measures import Array, frobenius
from schurbench.prepare.preparation import Preparation

if TYPE_CHECKING:
    from schurbench.factors import Factors
    from schurbench.policy import ShiftStrategy

__all__ = ["Run"]


@dataclass(eq=False, repr=False)
class Run:
    """The record of one iteration on one matrix.

    Magnitudes, shifts and Ritz values are in the working units of H; `to_matrix_units` turns them into those of the
    loaded matrix (the two differ only for extremely large or small matrices).

    Attributes
    ----------
    matrix : WorkingMatrix
    settings : Settings
    preparation : Preparation
    journal : Journal
        What the other attributes and methods read; steps, checkpoints and the middle diagonals of H.
    stop : Stop
    seconds : float
        Wall time of preparation and iteration, without compiling.
    phases : dict of str to float
        Seconds spent in ``"reduce"``, ``"iterate"`` and ``"compile"``; the last is that of the kernels, on the first run of
        a process.
    environment : dict
        Versions, BLAS, threads and processor the run was made with. After `resume`, ``"continued"`` lists those of each
        continuation with the state it went on from (``"after_step"``).
    """

    matrix: WorkingMatrix
    settings: Settings
    preparation: Preparation
    journal: Journal
    stop: Stop
    phases: dict[str, float]
    environment: dict[str, Any]
    _final: tuple[Array, Array]  # H and Zᴴ in the kernels' layout

    def __repr__(self) -> str:
        return f"<Run of {self.settings.strategy} on {self.matrix.name}, n = {self.n}: {self.stop.message}>"

    @property
    def n(self) -> int:
        """Order of the matrix."""
        return self.matrix.n

    @property
    def steps(self) -> Sequence[Step]:
        """One `Step` per call of ``step()``; ``steps[k-1].index == k``."""
        return self.journal.steps

    @cached_property
    def deflations(self) -> tuple[Deflation, ...]:
        """Every deflation, in order."""
        return tuple(d for step in self.steps for d in step.deflations)

    @property
    def converged(self) -> bool:
        """Whether the whole matrix reached Schur form."""
        return self.stop.reason is StopReason.CONVERGED

    @property
    def seconds(self) -> float:
        """Wall time of preparation and iteration, without compiling."""
        return self.phases["reduce"] + self.phases["iterate"]

    @cached_property
    def sweeps(self) -> int:
        """Number of steps that swept."""
        return sum(1 for step in self.steps if step.shifts)

    @cached_property
    def waits(self) -> npt.NDArray[np.int64]:
        """Sweeps since the last deflation at each step, this one included, shape (len(steps),)."""
        waits = np.zeros(len(self.steps), dtype=np.int64)
        waited = 0
        for i, step in enumerate(self.steps):
            waited += bool(step.shifts)
            waits[i] = waited
            if step.deflations:
                waited = 0
        return waits

    @cached_property
    def exceptional_steps(self) -> list[int]:
        """Indices of the steps that used exceptional shifts."""
        return [step.index for step in self.steps if step.exceptional]

    @cached_property
    def norm(self) -> float:
        """Frobenius norm of H in working units; no step changes it beyond rounding."""
        return frobenius(self.preparation.H)

    def subdiagonal(self, k: int) -> npt.NDArray[np.float64]:
        """Magnitudes |h[i+1, i]| after step k, shape (n−1,); k = 0 is the Hessenberg start."""
        return np.abs(self._bands(k)[1, : self.n - 1])

    def diagonal(self, k: int) -> Array:
        """Diagonal of H after step k, shape (n,)."""
        return np.array(self._bands(k)[0])

    def superdiagonal(self, k: int) -> Array:
        """Entries h[i, i+1] after step k, shape (n−1,)."""
        return self._bands(k)[2, : self.n - 1].copy()

    def window(self, k: int) -> Window:
        """Active window after step k; ``(0, 0)`` when nothing is left."""
        return self.journal.windows[self._checked(k)]

    def ritz(self, k: int) -> npt.NDArray[np.complex128]:
        """Eigenvalue estimates read off the diagonal of H after step k, complex, shape (n,), in row order.

        In complex form the diagonal itself. In real form adjacent rows are paired from the bottom of each unreduced
        block upward wherever their 2×2 block has complex eigenvalues; all other rows give their diagonal entry.
        """
        diagonal, sub, sup = self._bands(k)
        values: npt.NDArray[np.complex128] = diagonal.astype(np.complex128)
        if self.settings.form == "complex":
            return values
        half = (diagonal[:-1] - diagonal[1:]) / 2
        disc = half * half + sub[:-1] * sup[:-1]
        i = self.n - 2
        while i >= 0:
            if sub[i] != 0.0 and disc[i] < 0.0:
                centre = (diagonal[i] + diagonal[i + 1]) / 2
                root = np.sqrt(-disc[i])
                values[i], values[i + 1] = complex(centre, root), complex(centre, -root)
                i -= 2
            else:
                i -= 1
        return values

    def state(self, k: int) -> State:
        """H and Z after step k, exactly as stepping by hand leaves them; k = 0 is the Hessenberg start.

        Raises
        ------
        IndexError
            k is not a step of this run.
        """
        k = self._checked(k)
        from schurbench.kernels import join

        planes, Qh = self._final if k == len(self.steps) else self.journal.rebuild(k)
        H = join(planes)
        Z = np.ascontiguousarray(join(Qh).conj().T) if self.settings.accumulate else None
        for array in (H, Z):
            if array is not None:
                array.setflags(write=False)
        return State(H, Z, self.journal.windows[k], self.preparation.D, self.preparation.exponent)

    def rotations(self, k: int) -> Sequence[Rotation]:
        """Plane rotations or reflectors of step k (1 for the first), with the matrix between any two of them."""
        if k == 0:
            raise IndexError("state 0 is the Hessenberg start; rotations begin with step 1")
        return Rotations(self.journal, self.steps[self._checked(k) - 1])

    def to_matrix_units(self, values: Any) -> Any:
        """Values in working units (eigenvalues, shifts, magnitudes) in the units of the loaded matrix."""
        e = -self.preparation.exponent
        half = e // 2
        return values * 2.0**half * 2.0 ** (e - half)

    def factors(self) -> Factors:
        """Schur factors A = Z T Zᴴ of the loaded matrix, partial where the run stopped early.

        Raises
        ------
        SettingsError
            The run did not accumulate Z.
        """
        if not self.settings.accumulate:
            raise SettingsError("this run did not accumulate Z; run again with accumulate=True to get factors")
        from schurbench.factors.assemble import assemble

        return assemble(self)

    @property
    def store(self) -> Path | None:
        """Directory that holds the run, or None when it is in memory or in a file."""
        return self.journal.store.path if self.journal.store is not None else None

    def resume(
        self,
        limit: int | None = None,
        stop_when_stalled: bool | None = None,
        progress: Callable[[Progress], object] | None = None,
        cancel: threading.Event | None = None,
        *,
        store: str | Path | bool | None = None,
        strategy: ShiftStrategy | None = None,
    ) -> Run:
        """Go on from the last state, to the same bytes as if the run had never stopped.

        Parameters
        ----------
        limit : int, optional
            Largest number of sweeps of the whole run. By default that of the run, or as many again when they are used up.
        stop_when_stalled : bool, optional
            By default as it was, but False when that is what the run stopped for.
        progress : callable, optional
        cancel : threading.Event, optional
            As for `schurbench.iterate`.
        store : str, Path or False, optional
            Where to record: by default in the directory that holds the run, if one does; False for in memory only, or
            another directory for the whole run.
        strategy : ShiftStrategy, optional
            A strategy of one's own, which no record can bring back; only for a run that was made with one.

        Returns
        -------
        Run
            The whole run, earlier steps included. This one is unchanged.

        Raises
        ------
        SettingsError
            The run has converged, its sweeps would spoil the factors, or the limit is used up; the strategy is missing,
            superfluous or another one.
        InputError
            The directory cannot be written, is in use, or has gone on since this run was opened.

        Notes
        -----
        Under other library versions, or on another kind of processor, the steps that follow may differ in their last bits
        from those of an uninterrupted run. Both environments are recorded.
        """
        from schurbench.iteration import Iteration, drive

        iteration = Iteration.continue_from(
            self, limit=limit, stop_when_stalled=stop_when_stalled, store=store, strategy=strategy
        )
        return drive(iteration, progress, cancel)

    def save(self, path: str | Path, *, replace: bool = False) -> Path:
        """Write the run, its matrix included, to one file that `open_run` reads.

        Raises
        ------
        InputError
            The file exists and ``replace`` is not set, or it cannot be written.
        """
        from schurbench.journal.saved import save_run

        return save_run(self, Path(path), replace=replace)

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready summary."""
        return {
            "matrix": {
                "name": self.matrix.name,
                "source": self.matrix.source,
                "n": self.n,
                "dtype": self.matrix.array.dtype.name,
                "sha256": self.matrix.sha256,
                "file_sha256": self.matrix.file_sha256,
            },
            "settings": self.settings.to_dict(),
            "stop": {
                "reason": str(self.stop.reason),
                "message": self.stop.message,
                "window": list(self.stop.window),
            },
            "converged": self.converged,
            "steps": len(self.steps),
            "sweeps": self.sweeps,
            "sweeps_per_eigenvalue": self.sweeps / self.n,
            "longest_wait": int(self.waits.max(initial=0)),
            "exceptional_shifts": len(self.exceptional_steps),
            "deflations": len(self.deflations),
            "seconds": self.seconds,
            "phases": dict(self.phases),
            "environment": self.environment,
        }

    def _bands(self, k: int) -> Array:
        return self.journal.bands(self._checked(k))

    def _checked(self, k: int) -> int:
        if not 0 <= k <= len(self.steps):
            raise IndexError(f"step {k} is outside this run, which has states 0 to {len(self.steps)}")
        return k
