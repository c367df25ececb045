"""Recording while the iteration runs, and rebuilding any earlier state from the nearest checkpoint."""

from __future__ import annotations

from collections.abc import Iterable
from copy import copy
from threading import RLock
from typing import TYPE_CHECKING, Any

import numpy as np

from schurbench.journal.records import SPIKE, Deflation, DeflationKind, Step, Window
from schurbench.measures import Array
from schurbench.prepare.preparation import single_blas_thread

if TYPE_CHECKING:
    from schurbench.journal.store import RunStore

__all__ = ["Journal", "replay_step"]

# Work between checkpoints at first, in sweeps over the whole matrix. Copying H and Zᴴ into fresh memory costs about as much
# as four sweeps, so that one copy in 128 adds some 3 % to the run; the distance doubles whenever the byte budget is used up.
# What lies between is filled in when someone goes there.
_FIRST_DISTANCE = 128

# A deflation window of m rows costs about as much as this many rotations of whole rows for each of its rows.
_WINDOW_WORK = 4

_CHUNK = 64


class Journal:
    """Steps, bands of H after every step, and checkpoints within a byte budget; with a store, all of it there as well.

    Parameters
    ----------
    H, Qh : arrays in the kernels' layout
        The state before the first step; kept as it is, so it must not change.
    keep : int
        Bytes allowed for checkpoints in memory, and again for the bands.
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
        self.store: RunStore | None = None
        self._distance = _FIRST_DISTANCE
        self._work = 0  # rotations since the last checkpoint
        self._state_bytes = H.nbytes + Qh.nbytes
        self._chunks: list[Array] = []
        self._base = 0  # first state whose bands are in memory; earlier ones are in the store
        self._banded = 0  # states whose bands are in memory: _base … _base+_banded−1
        self._last: Array | None = None  # bands of the last state recorded
        self._walk: tuple[int, Array, Array] | None = None  # the last state rebuilt, so that walking forward is cheap
        self._replaying = RLock()  # a page paints states in one thread while another asks for some
        self._band_bytes = 3 * self.n * self.band_type.itemsize

    @classmethod
    def begin(cls, H: Array, Qh: Array, window: Window, keep: int, store: RunStore | None = None) -> Journal:
        """A journal whose only state is the start, with a store to write to or none."""
        journal = cls(H, Qh, window, keep)
        journal.store = store
        journal._keep_bands(H, None)
        if store is not None and journal._last is not None:
            store.add(None, window, journal._last)
        return journal

    def add(self, step: Step, H: Array, Qh: Array, window: Window) -> None:
        """Record one finished step and the state it led to."""
        self.steps.append(step)
        self.windows.append(window)
        self._keep_bands(H, step)
        work = step.rotations + _WINDOW_WORK * step.rows
        self._work += work
        copied: tuple[Array, Array] | None = None
        if self._work >= self._distance * self.n:
            self._work = 0
            while len(self.checkpoints) > 1 and not self._room():
                self._distance *= 2
                self.checkpoints = {k: self.checkpoints[k] for k in sorted(self.checkpoints)[::2]}
            if self._room():
                copied = self.checkpoints[step.index] = (H.copy(), Qh.copy())
        if self.store is not None and self.store.held and self._last is not None:
            self.store.add(step, window, self._last)
            if self.store.wants_checkpoint(work, self.n):
                self.store.add_checkpoint(step.index, *(copied or (H.copy(), Qh.copy())))

    def mend(self) -> None:
        """Make the record whole again when an interrupt came while a step was recorded."""
        del self.steps[len(self.windows) - 1 :]
        self._last = None  # may be that of an earlier state
        if self.store is not None and self.store.held:
            for k in range(self.store.added, len(self.windows)):
                self.store.add(self.steps[k - 1] if k else None, self.windows[k], self.bands(k).copy())

    def _room(self) -> bool:
        """Whether one more checkpoint fits in the budget."""
        return (len(self.checkpoints) + 1) * self._state_bytes <= self.keep

    def _keep_bands(self, H: Array, step: Step | None) -> None:
        """Take the bands of the state after the step, for memory as long as there is room, and for the store."""
        state = 0 if step is None else step.index
        slot = self._banded % _CHUNK
        fits = state == self._base + self._banded and (
            slot > 0 or not self._chunks or len(self._chunks) * _CHUNK * self._band_bytes < self.keep
        )
        if fits:
            if slot == 0 and len(self._chunks) * _CHUNK == self._banded:  # it is there if an interrupt came after it
                self._chunks.append(np.empty((_CHUNK, 3, self.n), dtype=self.band_type))
            out: Array = self._chunks[-1][slot]
            self._banded += 1
        elif self.store is not None and self.store.held:
            out = np.empty((3, self.n), dtype=self.band_type)
        else:
            self._last = None
            return  # later bands are rebuilt by replay when someone asks
        lo, hi = 0, self.n
        if step is not None and not step.deflations and self._last is not None:
            out[:] = self._last  # nothing outside the window of the step has changed
            lo, hi = max(0, step.window[0] - 1), step.window[1]
        self._copy_bands(H, lo, hi, out)
        self._last = out

    @property
    def held(self) -> int:
        """States whose bands are in memory or in the store, 0 … held−1; later ones are rebuilt by replay."""
        stored = self.store.states if self.store is not None else 0
        return max(stored, self._base + self._banded) if self._base <= stored else stored

    def bands(self, k: int) -> Array:
        """Diagonal, subdiagonal and superdiagonal of H after step k, shape (3, n); the last two end with 0."""
        if self._base <= k < self._base + self._banded:
            chunk, slot = divmod(k - self._base, _CHUNK)
            held: Array = self._chunks[chunk][slot]
            return held
        if self.store is not None:
            if k >= self.store.states:
                self.store.flush()
            if k < self.store.states:
                return self.store.bands(k)
        H, _ = self.rebuild(k)
        out = np.empty((3, self.n), dtype=self.band_type)
        self._copy_bands(H, 0, self.n, out)
        return out

    @property
    def checkpoint_steps(self) -> list[int]:
        """States that are kept whole, in memory or in the store."""
        stored = self.store.checkpoints if self.store is not None else []
        return sorted({*self.checkpoints, *(k for k in stored if k <= len(self.steps))})

    def checkpoint(self, k: int) -> tuple[Array, Array]:
        """H and Zᴴ after step k, one of `checkpoint_steps`; not to be changed."""
        if k in self.checkpoints or self.store is None:
            return self.checkpoints[k]
        return self.store.checkpoint(k)

    def rebuild(self, k: int) -> tuple[Array, Array]:
        """H and Zᴴ after step k in the kernels' layout, bit for bit; the caller may keep but not change them."""
        with self._replaying:
            return self._rebuild(k)

    def _rebuild(self, k: int) -> tuple[Array, Array]:
        from schurbench.kernels import Workspace

        start = max(i for i in self.checkpoint_steps if i <= k)
        if self._walk is not None and start <= self._walk[0] <= k:
            start, H, Qh = self._walk
        else:
            H, Qh = self.checkpoint(start)
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
        """Bands of the first states, as many as are held and the budget allows, shape (states, 3, n)."""
        count = min(self.held, _CHUNK * -(-max(1, self.keep) // (_CHUNK * self._band_bytes)))
        if not count:
            return np.empty((0, 3, self.n), dtype=self.band_type)
        return np.stack([self.bands(k) for k in range(count)])

    def __getstate__(self) -> dict[str, Any]:
        # a lock stays in its process; runs travel between processes when a comparison is spread over them
        return {name: value for name, value in self.__dict__.items() if name != "_replaying"}

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__.update(state)
        self._replaying = RLock()

    def snapshot(self) -> Journal:
        """A journal of its own with what is recorded so far; the arrays, which no one changes, are shared."""
        twin = copy(self)
        twin._replaying = RLock()
        twin.steps = list(self.steps)
        twin.windows = list(self.windows)
        twin.checkpoints = dict(self.checkpoints)
        twin._chunks = list(self._chunks)
        twin._walk = None
        return twin

    def continued(self) -> Journal:
        """A journal of its own that more steps can be added to, whatever becomes of this one."""
        twin = self.snapshot()
        if twin._banded % _CHUNK:
            twin._chunks[-1] = twin._chunks[-1].copy()  # others may write into the rest of it
        if twin._base + twin._banded < len(twin.windows) <= self.held:  # the last ones are in the store only
            twin._base, twin._banded, twin._chunks = len(twin.windows), 0, []
        twin._last = None
        return twin

    @classmethod
    def from_store(cls, store: RunStore, steps: list[Step], windows: list[Window], keep: int) -> Journal:
        """What a store holds; only the start is brought into memory."""
        journal = cls(*store.checkpoint(0), windows[0], keep)
        journal.store, journal.steps, journal.windows = store, steps, windows
        journal._base = len(windows)
        return journal

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
