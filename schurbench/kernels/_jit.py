"""How kernels are compiled: one set of options for all of them."""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from functools import cache
from pathlib import Path
from typing import Any, TypeVar

import numba

__all__ = ["compiled", "exact", "inlined"]

F = TypeVar("F", bound=Callable[..., Any])

# "contract" lets a·b + c become one fused instruction: 4–14 % faster and still deterministic for one CPU type. The other
# fast-math liberties are refused: they break the tests for infinities and reorder sums, so replay would lose its promise.
_OPTIONS: dict[str, Any] = {"nogil": True, "fastmath": {"contract"}, "error_model": "numpy"}


def compiled(function: F) -> F:
    """Compile on first call, cached on disk wherever numba finds a directory it can write."""
    try:
        dispatcher = numba.njit(cache=True, **_OPTIONS)(function)
    except RuntimeError:  # neither the package's directory nor the user's cache directory can be written
        return numba.njit(**_OPTIONS)(function)
    _forget_stale(dispatcher.stats.cache_path)
    return dispatcher


@cache
def _forget_stale(directory: str) -> None:
    """Empty the cache of this room when any of its source files has changed.

    Numba compares the time stamp of a kernel's own file only, so that a change in `rotations` would leave the compiled
    sweeps of another file as they were.
    """
    sources = sorted(Path(__file__).parent.glob("*.py"))
    digest = hashlib.sha256(b"".join(path.read_bytes() for path in sources)).hexdigest()
    place = Path(directory)
    mark = place / "kernels.sha256"
    try:
        if mark.exists() and mark.read_text() == digest:
            return
        for stale in [*place.glob("*.nbi"), *place.glob("*.nbc")]:
            stale.unlink(missing_ok=True)
        mark.write_text(digest)
    except OSError:
        pass  # a cache that cannot be written cannot have gone stale through us


def inlined(function: F) -> F:
    """Compile as part of the kernels that call it."""
    return numba.njit(inline="always", **_OPTIONS)(function)


def exact(function: F) -> F:
    """Compile without fused instructions, for the few lines whose rounding errors must be exactly those written."""
    return numba.njit(nogil=True, error_model="numpy")(function)
