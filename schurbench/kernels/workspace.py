"""Room for the rotations of one sweep."""

from __future__ import annotations

import numpy as np

__all__ = ["Workspace"]


class Workspace:
    """Room for the rotations of one sweep, which is also the record of that sweep for inspection.

    Attributes
    ----------
    C : (n,) float64
    S : (n,) float64, or (2, n) for a complex H
        Rotations of the last explicit single-shift step.
    V : (n, 3) float64
        Reflectors (t, v₁, v₂) of the last double-shift sweep; no rows for a complex H.
    """

    __slots__ = ("C", "S", "V")

    def __init__(self, H: np.ndarray) -> None:
        n = H.shape[-1]
        self.C = np.ones(n)
        self.S = np.zeros(n if H.ndim == 2 else (2, n))
        self.V = np.zeros((n if H.ndim == 2 else 0, 3))
