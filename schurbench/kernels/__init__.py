"""Compiled steps: rotations, reflectors, one sweep of each kind, the scan for negligible entries. No decisions.

Importing this room imports numba, so the rooms after it import it only when a run begins. Nothing compiles before its
first call; `warm` compiles everything ahead and leaves it in numba's on-disk cache.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from functools import partial

import numpy as np

from schurbench.kernels.blocks import deflation_threshold
from schurbench.kernels.deflation_window import WindowOutcome, deflate_window
from schurbench.kernels.engine import APART, bands, deflate, scan, sweep
from schurbench.kernels.planes import join, split
from schurbench.kernels.sweeps import single_shift_step
from schurbench.kernels.workspace import Workspace

__all__ = [
    "APART",
    "WindowOutcome",
    "Workspace",
    "bands",
    "cache_directory",
    "deflate",
    "deflate_window",
    "deflation_threshold",
    "join",
    "scan",
    "split",
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
    for kind in ("real", "complex"):
        start = np.triu(np.arange(1.0, 26.0).reshape(5, 5), -1)
        H = split(start if kind == "real" else start * (1.0 + 0.5j))
        Qh = split(np.eye(5) if kind == "real" else np.eye(5, dtype=complex))
        out = np.zeros((3, 5), dtype=float if kind == "real" else complex)
        work = Workspace(H)
        calls: list[tuple[str, Callable[[], object]]] = [
            ("single-shift step", partial(sweep, H, Qh, work, (0, 5), (1.0,), 1)),
            ("scan", partial(scan, H, (0, 5), 1, -1.0, 10.0)),
            ("bands", partial(bands, H, 0, 5, out)),
        ]
        if kind == "real":
            calls += [
                ("double-shift sweep", partial(sweep, H, Qh, work, (0, 5), (1.0 + 1.0j, 1.0 - 1.0j), 2)),
                ("2×2 blocks", partial(deflate, H, Qh, 3, 2)),
            ]
        calls.append(
            ("threshold", partial(deflation_threshold, out[0, 0], out[0, 1], 1.0, 1.0, 1.0, 1.0, 1, -1.0, 1.0))
        )
        many = split(np.triu(np.ones((8, 8)) + np.diag(np.arange(8.0)), -1) * (1.0 if kind == "real" else 1.0 + 0.5j))
        calls.append(("deflation window", partial(deflate_window, many, many[..., :0, :], (0, 8), 6, 1)))
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
