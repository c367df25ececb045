"""Recording while the iteration runs, and rebuilding any earlier state from the nearest checkpoint."""

from __future__ import annotations

from collections.abc import Iterable
from copy import copy

import numpy as np

from schurbench.journal.records import SPIKE, Deflation, DeflationKind, Step, Window
from schurbench.measures import Array
from schurbench.prepare.preparation import single_blas_thread

__all__ = ["Journal", "replay_step"]

# Steps between checkpoints at first. Copying H and Zᴴ costs about as much as two sweeps, so one copy in 64 sweeps adds
# some 3 % to the run; the spacing doubles whenever the byte budget is used up.
_FIRST_SPACING = 64

_CHUNK = 64


class Journal:
    """Steps, bands of H after every step, and checkpoints within a byte budget.

    Parameters
    ----------
    H, Qh : arrays in the kernels' layout
        The state before the first step; kept as it is, so it must not change.
    keep : int
        Bytes allowed for checkpoints, and again for the bands.
    """

    def __init__(self, H: Array, Qh: Array, window: Window, keep: int) -> None:
        from schurbench.kernels import bands  # not before a run begins

        self._copy_bands = bands
        self.n = H.shape[-1]
        self.band_type = np.dtype(np.float64 if H.ndim == 2 else np.complex128)
        self.keep = keep
        self.steps: list[Step] = []
        self.windows: list[Window] = [window]
        self.spacing = _FIRST_SPACING
        self.checkpoints: dict[int, tuple[Array, Array]] = {0: (H, Qh)}
        self._state_bytes = H.nbytes + Qh.nbytes
        self._chunks: list[Array] = []
        self._banded = 0  # states whose bands are held: 0 … _banded−1
        self._walk: tuple[int, Array, Array] | None = None  # the last state rebuilt, so that walking forward is cheap
        self._band_bytes = 3 * self.n * self.band_type.itemsize
        self._keep_bands(H)

    def add(self, step: Step, H: Array, Qh: Array, window: Window) -> None:
        """Record one finished step and the state it led to."""
        self.steps.append(step)
        self.windows.append(window)
        index = step.index
        if self._banded == index:
            self._keep_bands(H)
        if index % self.spacing == 0:
            self._checkpoint(index, H, Qh)

    def _keep_bands(self, H: Array) -> None:
        slot = self._banded % _CHUNK
        if slot == 0:
            if self._chunks and len(self._chunks) * _CHUNK * self._band_bytes >= self.keep:
                return  # later bands are rebuilt by replay when someone asks
            self._chunks.append(np.empty((_CHUNK, 3, self.n), dtype=self.band_type))
        self._copy_bands(H, self._chunks[-1][slot])
        self._banded += 1

    def _checkpoint(self, index: int, H: Array, Qh: Array) -> None:
        while len(self.checkpoints) > 1 and (len(self.checkpoints) + 1) * self._state_bytes > self.keep:
            self.spacing *= 2
            self.checkpoints = {k: state for k, state in self.checkpoints.items() if k % self.spacing == 0}
            if index % self.spacing:
                return
        if 2 * self._state_bytes <= self.keep:
            self.checkpoints[index] = (H.copy(), Qh.copy())

    @property
    def held(self) -> int:
        """States whose bands are in memory, 0 … held−1; later ones are rebuilt by replay."""
        return self._banded

    def bands(self, k: int) -> Array:
        """Diagonal, subdiagonal and superdiagonal of H after step k, shape (3, n); the last two end with 0."""
        if k < self._banded:
            held: Array = self._chunks[k // _CHUNK][k % _CHUNK]
            return held
        H, _ = self.rebuild(k)
        out = np.empty((3, self.n), dtype=self.band_type)
        self._copy_bands(H, out)
        return out

    def rebuild(self, k: int) -> tuple[Array, Array]:
        """H and Zᴴ after step k in the kernels' layout, bit for bit; the caller may keep but not change them."""
        from schurbench.kernels import Workspace

        start = max(i for i in self.checkpoints if i <= k)
        if self._walk is not None and start <= self._walk[0] <= k:
            start, H, Qh = self._walk
        else:
            H, Qh = self.checkpoints[start]
        if start == k:
            return H, Qh
        H, Qh = H.copy(), Qh.copy()
        work = Workspace(H)
        for step in self.steps[start:k]:
            replay_step(H, Qh, work, step)
        self._walk = (k, H, Qh)
        return H, Qh

    def all_bands(self) -> Array:
        """Bands of every state held in memory, shape (states, 3, n)."""
        if not self._chunks:
            return np.empty((0, 3, self.n), dtype=self.band_type)
        return np.concatenate(self._chunks)[: self._banded]

    def snapshot(self) -> Journal:
        """A journal of its own with what is recorded so far; the arrays, which no one changes, are shared."""
        twin = copy(self)
        twin.steps = list(self.steps)
        twin.windows = list(self.windows)
        twin.checkpoints = dict(self.checkpoints)
        twin._chunks = list(self._chunks)
        twin._walk = None
        return twin

    @classmethod
    def from_parts(
        cls,
        steps: Iterable[Step],
        windows: Iterable[Window],
        checkpoints: dict[int, tuple[Array, Array]],
        bands: Array,
        keep: int,
    ) -> Journal:
        """Put a saved journal together again."""
        journal = cls(*checkpoints[0], (0, 0), keep)
        journal.steps = list(steps)
        journal.windows = list(windows)
        journal.checkpoints = checkpoints
        journal._banded = len(bands)
        journal._chunks = []
        for i in range(0, len(bands), _CHUNK):
            chunk = np.empty((_CHUNK, 3, journal.n), dtype=bands.dtype)
            part = bands[i : i + _CHUNK]
            chunk[: len(part)] = part
            journal._chunks.append(chunk)
        return journal


def replay_step(H: Array, Qh: Array, work: object, step: Step) -> None:
    """Carry out a recorded step again, in place. It follows the record and decides nothing."""
    from schurbench.kernels import deflate, deflate_window, sweep

    def follow(deflations: Iterable[Deflation]) -> None:
        for deflation in deflations:
            if deflation.test != SPIKE:  # those are part of looking into the window
                deflate(H, Qh, deflation.row, 0 if deflation.kind is DeflationKind.SPLIT else deflation.size)

    follow(d for d in step.deflations if d.before_sweep)
    if step.rows:
        with single_blas_thread():
            deflate_window(H, Qh, step.window, step.rows, step.index)
    elif step.shifts:
        sweep(H, Qh, work, step.window, step.shifts, step.index)
    follow(d for d in step.deflations if not d.before_sweep)
