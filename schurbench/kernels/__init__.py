"""Compiled steps: rotations, reflectors, one sweep of each kind, the scan for negligible entries. No decisions.

Importing this room imports numba, so the rooms after it import it only when a run begins. Nothing compiles before its
first call; `warm` compiles everything ahead and leaves it in numba's on-disk cache.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from functools import cache, partial

import numpy as np

from schurbench.kernels.blocks import deflation_threshold
from schurbench.kernels.deflation_window import WindowOutcome, deflate_window
from schurbench.kernels.engine import bands, deflate, scan, sweep
from schurbench.kernels.planes import join, split
from schurbench.kernels.sweeps import APART, single_shift_steps
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
    "make_ready",
    "scan",
    "split",
    "sweep",
    "warm",
]


_WINDOW = "deflation window"


def _calls(kind: str) -> dict[str, Callable[[], object]]:
    """One small call of every kernel for ``"real"`` or ``"complex"`` matrices, in the order in which a run needs them."""
    unit = 1.0 if kind == "real" else 1.0 + 0.5j
    H, Qh = split(np.triu(np.arange(1.0, 26.0).reshape(5, 5), -1) * unit), split(np.eye(5) * (unit / abs(unit)))
    many = split(np.triu(np.ones((8, 8)) + np.diag(np.arange(8.0)), -1) * unit)
    out = np.zeros((3, 5), dtype=type(unit))
    work = Workspace(H)
    calls: dict[str, Callable[[], object]] = {
        "bands": partial(bands, H, 0, 5, out),
        "scan": partial(scan, H, (0, 5), 1, -1.0, 10.0),
        "single-shift step": partial(sweep, H, Qh, work, (0, 5), (1.0,), 1),
    }
    if kind == "real":
        calls["double-shift sweep"] = partial(sweep, H, Qh, work, (0, 5), (1.0 + 1.0j, 1.0 - 1.0j), 2)
        calls["2×2 blocks"] = partial(deflate, H, Qh, 3, 2)
    calls[_WINDOW] = partial(deflate_window, many, many[..., :0, :], (0, 8), 6, 1)
    calls["threshold"] = partial(deflation_threshold, out[0, 0], out[0, 1], 1.0, 1.0, 1.0, 1.0, 1, -1.0, 1.0)
    return calls


def warm() -> dict[str, float]:
    """Compile every kernel for real and complex matrices, or load it from the cache.

    Returns
    -------
    dict of str to float
        Seconds spent on each kernel; nearly nothing where the cache already held it.
    """
    spent: dict[str, float] = {}
    for kind in ("real", "complex"):
        for name, call in _calls(kind).items():
            began = time.perf_counter()
            call()
            spent[f"{name}, {kind}"] = time.perf_counter() - began
    return spent


@cache
def make_ready(kind: str, windows: bool) -> None:
    """Compile, or load from the cache, what a run needs, so that its first sweep is not timed with the compiler.

    Parameters
    ----------
    kind : {"real", "complex"}
    windows : bool
        Whether deflation windows will be looked into; they take longest to compile.
    """
    for name, call in _calls(kind).items():
        if windows or name != _WINDOW:
            call()


def cache_directory() -> str | None:
    """Directory of the on-disk cache, or None where no directory can be written."""
    stats = getattr(single_shift_steps, "stats", None)
    path = getattr(stats, "cache_path", None)
    return str(path) if path else None
