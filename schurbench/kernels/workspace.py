"""Room for the rotations of one step."""

from __future__ import annotations

import numpy as np

__all__ = ["Workspace"]


class Workspace:
    """Room for the rotations of one step, which is also the record of that step for inspection.

    Attributes
    ----------
    C : (m, n) float64
    S : (m, n) float64, or (m, 2, n) for a complex H
        Rotations of the single-shift steps, one row for each shift.
    V : (m, n, 3) float64
        Reflectors (t, v₁, v₂) of the double-shift sweeps, one layer for each pair; no layers for a complex H.
    """

    __slots__ = ("C", "S", "V", "_n", "_real")

    def __init__(self, H: np.ndarray) -> None:
        self._n, self._real = H.shape[-1], H.ndim == 2
        self.C, self.S, self.V = np.empty((0, 0)), np.empty((0, 0)), np.empty((0, 0, 0))
        self.singles(1)
        if self._real:
            self.doubles(1)

    def singles(self, m: int) -> None:
        """Make room for m single-shift steps."""
        if len(self.C) < m:
            self.C = np.ones((m, self._n))
            self.S = np.zeros((m, self._n) if self._real else (m, 2, self._n))

    def doubles(self, m: int) -> None:
        """Make room for m double-shift sweeps."""
        if len(self.V) < m:
            self.V = np.zeros((m, self._n, 3))
