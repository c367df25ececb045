"""Recording while the iteration runs, and rebuilding any earlier state from the nearest checkpoint."""

from __future__ import annotations

from collections.abc import Iterable
from copy import copy

import numpy as np

from schurbench.journal.records import SPIKE, Deflation, DeflationKind, Step, Window
from schurbench.measures import Array
from schurbench.prepare.preparation import single_blas_thread

__all__ = ["Journal", "replay_step"]

# Work between checkpoints at first, in sweeps over the whole matrix. Copying H and Zᴴ into fresh memory costs about as much
# as four sweeps, so that one copy in 128 adds some 3 % to the run; the distance doubles whenever the byte budget is used up.
# What lies between is filled in when someone goes there.
_FIRST_DISTANCE = 128

# A deflation window of m rows costs about as much as this many rotations of whole rows for each of its rows.
_WINDOW_WORK = 4

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
        self.checkpoints: dict[int, tuple[Array, Array]] = {0: (H, Qh)}
        self._distance = _FIRST_DISTANCE
        self._work = 0  # rotations since the last checkpoint
        self._state_bytes = H.nbytes + Qh.nbytes
        self._chunks: list[Array] = []
        self._banded = 0  # states whose bands are held: 0 … _banded−1
        self._walk: tuple[int, Array, Array] | None = None  # the last state rebuilt, so that walking forward is cheap
        self._band_bytes = 3 * self.n * self.band_type.itemsize
        self._keep_bands(H, None)

    def add(self, step: Step, H: Array, Qh: Array, window: Window) -> None:
        """Record one finished step and the state it led to."""
        self.steps.append(step)
        self.windows.append(window)
        if self._banded == step.index:
            self._keep_bands(H, step)
        self._work += step.rotations + _WINDOW_WORK * step.rows
        if self._work >= self._distance * self.n:
            self._work = 0
            while len(self.checkpoints) > 1 and not self._room():
                self._distance *= 2
                self.checkpoints = {k: self.checkpoints[k] for k in sorted(self.checkpoints)[::2]}
            if self._room():
                self.checkpoints[step.index] = (H.copy(), Qh.copy())

    def _room(self) -> bool:
        """Whether one more checkpoint fits in the budget."""
        return (len(self.checkpoints) + 1) * self._state_bytes <= self.keep

    def _keep_bands(self, H: Array, step: Step | None) -> None:
        chunk, slot = divmod(self._banded, _CHUNK)
        if slot == 0:
            if self._chunks and len(self._chunks) * _CHUNK * self._band_bytes >= self.keep:
                return  # later bands are rebuilt by replay when someone asks
            self._chunks.append(np.empty((_CHUNK, 3, self.n), dtype=self.band_type))
        out = self._chunks[-1][slot]
        lo, hi = 0, self.n
        if step is not None and not step.deflations:  # nothing outside the window of the step has changed
            out[:] = self._chunks[-1][slot - 1] if slot else self._chunks[chunk - 1][-1]
            lo, hi = max(0, step.window[0] - 1), step.window[1]
        self._copy_bands(H, lo, hi, out)
        self._banded += 1

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
        self._copy_bands(H, 0, self.n, out)
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
        # checkpoints on the way, as close as the budget allows, so that the next jump to these parts is short
        close = max(1, -(-len(self.steps) * self._state_bytes // max(1, self.keep)))
        for step in self.steps[start:k]:
            replay_step(H, Qh, work, step)
            if step.index % close == 0 and step.index < k and self._room():
                self.checkpoints[step.index] = (H.copy(), Qh.copy())
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
