"""The rotations inside one step, one by one, with the matrix between any two of them."""

from __future__ import annotations

from collections.abc import Sequence
from typing import overload

import numpy as np

from schurbench.journal.journal import Journal
from schurbench.journal.records import DeflationKind, Rotation, Step
from schurbench.measures import Array

__all__ = ["Rotations"]


class Rotations(Sequence[Rotation]):
    """Plane rotations or reflectors of one step, in the order in which they act.

    An explicit single-shift step is listed as n−1 rotations from the left followed by the same from the right; between
    them the window holds H − σI on its way to R and to RQ, and after the last one σI has been added back. A double-shift
    sweep is listed as reflectors that act from both sides at once, as the method is written; several shifts follow one
    another. A deflation window is not made of single rotations and lists none.

    The small matrices are those of the run, bit for bit. The matrices between them are formed here one rotation at a
    time and so agree with the recorded state after the step to rounding, not to the last bit.
    """

    def __init__(self, journal: Journal, step: Step) -> None:
        from schurbench.kernels import APART, Workspace, deflate, join, sweep

        H, Qh = journal.rebuild(step.index - 1)
        H, Qh = H.copy(), Qh.copy()
        for deflation in step.deflations:
            if deflation.before_sweep:
                deflate(H, Qh, deflation.row, 0 if deflation.kind is DeflationKind.SPLIT else deflation.size)
        self.step = step
        self._start = join(H)
        lo, hi = step.window
        work = Workspace(H)
        none = Qh[..., :0, :]
        acts: list[tuple[int, str, Array, complex]] = []  # row, side, G, shift to subtract before or add after
        if H.ndim == 2 and len(step.shifts) > 1:
            for i in range(0, len(step.shifts), 2):
                sweep(H, none, work, step.window, step.shifts[i : i + 2], step.index + APART * i)
                V = work.V[0]
                for k in range(lo, hi - 1):
                    v = np.array([1.0, V[k, 1], V[k, 2]][: min(3, hi - k)])
                    acts.append((k, "both", np.eye(len(v)) - V[k, 0] * np.outer(v, v), 0.0))
        else:
            for i, shift in enumerate(step.shifts):
                typed = shift.real if H.ndim == 2 else shift
                sweep(H, none, work, step.window, (shift,), step.index + APART * i)
                C, S = work.C[0], join(work.S[0][..., None, :])[0]
                for side in ("left", "right"):
                    for k in range(lo, hi - 1):
                        c, s = C[k], S[k]
                        edge = (side == "left" and k == lo) or (side == "right" and k == hi - 2)
                        acts.append((k, side, np.array([[c, s], [-np.conj(s), c]]), typed if edge else 0.0))
        self._acts = acts
        self._walk: tuple[int, Array] = (-1, self._start)

    def __len__(self) -> int:
        return len(self._acts)

    @overload
    def __getitem__(self, index: int) -> Rotation: ...
    @overload
    def __getitem__(self, index: slice) -> list[Rotation]: ...
    def __getitem__(self, index: int | slice) -> Rotation | list[Rotation]:
        if isinstance(index, slice):
            return [self[i] for i in range(*index.indices(len(self)))]
        if index < 0:
            index += len(self)
        if not 0 <= index < len(self):
            raise IndexError(f"step {self.step.index} has {len(self)} rotations")
        done, H = self._walk if self._walk[0] <= index else (-1, self._start)
        H = H.copy()
        for row, side, G, shift in self._acts[done + 1 : index + 1]:
            self._apply(H, row, side, G, shift)
        self._walk = (index, H)
        row, side, G, _ = self._acts[index]
        seen, small = H.view(), G.view()
        seen.setflags(write=False)
        small.setflags(write=False)
        return Rotation(row, side, small, seen)

    def _apply(self, H: Array, row: int, side: str, G: Array, shift: complex) -> None:
        lo, hi = self.step.window
        diagonal = np.arange(lo, hi)
        block = slice(row, row + len(G))
        if side == "left" and shift:
            H[diagonal, diagonal] -= shift
        if side in ("left", "both"):
            H[block] = G @ H[block]
            # what the rotation was chosen to annihilate is zero by construction in the kernels, too
            if side == "left":
                H[row + 1, row] = 0.0
            elif row > lo:
                H[row + 1 : row + len(G), row - 1] = 0.0
        if side in ("right", "both"):
            H[:, block] = H[:, block] @ G.conj().T
        if side == "right" and shift:
            H[diagonal, diagonal] += shift
