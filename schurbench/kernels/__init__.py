"""Compiled steps: rotations, reflectors, one sweep of each kind, the scan for negligible entries. No decisions.

Importing this room imports numba, so the rooms after it import it only when a run begins. Nothing compiles before its
first call; `warm` compiles everything ahead and leaves it in numba's on-disk cache.
"""

from __future__ import annotations

import time
from typing import Any

import numpy as np

from schurbench.kernels.blocks import copy_bands, scan_up, standardise_pair
from schurbench.kernels.engine import deflate, sweep
from schurbench.kernels.rotations import make_rotation
from schurbench.kernels.sweeps import double_shift_sweep, single_shift_step
from schurbench.kernels.workspace import Workspace

__all__ = [
    "Workspace",
    "cache_directory",
    "copy_bands",
    "deflate",
    "double_shift_sweep",
    "make_rotation",
    "scan_up",
    "single_shift_step",
    "standardise_pair",
    "sweep",
    "warm",
]


def warm() -> dict[str, float]:
    """Compile every kernel for real and complex matrices, or load it from the cache.

    Returns
    -------
    dict of str to float
        Seconds spent on each kernel; nearly nothing where the cache already held it.
    """
    spent: dict[str, float] = {}
    for dtype in (np.float64, np.complex128):
        kind = "real" if dtype == np.float64 else "complex"
        H = np.triu(np.arange(1.0, 26.0).reshape(5, 5), -1).astype(dtype)
        Qh = np.eye(5, dtype=dtype)
        work = Workspace(5, H.dtype)
        bands = np.zeros((3, 5), dtype=dtype)
        calls: list[tuple[str, Any]] = [
            (
                "single-shift step",
                lambda H=H, Qh=Qh, w=work: single_shift_step(H, Qh, 0, 5, H.dtype.type(1.0), w.C, w.S, 1),
            ),
            ("scan", lambda H=H: scan_up(H, 0, 5, 1, -1.0, 10.0)),
            ("bands", lambda H=H, b=bands: copy_bands(H, b)),
        ]
        if dtype == np.float64:
            calls += [
                (
                    "double-shift sweep",
                    lambda H=H, Qh=Qh, w=work: double_shift_sweep(H, Qh, 0, 5, 1.0, 1.0, 1.0, -1.0, w.V, 1),
                ),
                ("2×2 blocks", lambda H=H, Qh=Qh: standardise_pair(H, Qh, 3)),
            ]
        for name, call in calls:
            began = time.perf_counter()
            call()
            spent[f"{name}, {kind}"] = time.perf_counter() - began
    return spent


def cache_directory() -> str | None:
    """Directory of the on-disk cache, or None where no directory can be written."""
    stats = getattr(single_shift_step, "stats", None)
    path = getattr(stats, "cache_path", None)
    return str(path) if path else None
