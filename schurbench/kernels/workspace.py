"""Room for the rotations of one sweep."""

from __future__ import annotations

from typing import Any

import numpy as np

__all__ = ["Workspace"]


class Workspace:
    """Room for the rotations of one sweep, which is also the record of that sweep for inspection.

    Attributes
    ----------
    C : (n,) float64; S : (n,) of H's type
        Rotations of the last explicit single-shift step.
    V : (n, 3) float64
        Reflectors (t, v₁, v₂) of the last double-shift sweep; no rows for a complex H.
    """

    __slots__ = ("C", "S", "V")

    def __init__(self, n: int, dtype: Any) -> None:
        self.C = np.ones(n)
        self.S = np.zeros(n, dtype=dtype)
        self.V = np.zeros((n if dtype == np.float64 else 0, 3))
