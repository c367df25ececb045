"""What a matrix will cost in memory, asked before any of it is taken."""

from __future__ import annotations

import os
from pathlib import Path

from schurbench.errors import InputError

__all__ = ["available_bytes", "readable_size", "require_memory", "require_room", "run_bytes"]

ARRAYS_IN_A_RUN = 10
"""Dense n × n arrays' worth of memory at the peak of a run, with its recorded bands and without the checkpoints of its
history. Measured with tracemalloc at n = 400 with ``keep="1 MiB"``: 10.2 in real arithmetic and 9.6 in complex."""

ASSUMED_BYTES = 4 * 2**30
"""Taken as the memory of a machine that does not tell: small enough to be safe on a present-day laptop."""


def run_bytes(n: int, *, is_complex: bool = False) -> int:
    """Memory that a run on a dense matrix takes, without the checkpoints of its history.

    Parameters
    ----------
    n : int
        Order of the matrix.
    is_complex : bool
        Whether entries take 16 bytes (complex128) rather than 8 (float64).

    Returns
    -------
    int
        Bytes: `ARRAYS_IN_A_RUN` dense arrays. Checkpoints have their own limit, the setting ``keep``.
    """
    return ARRAYS_IN_A_RUN * n * n * (16 if is_complex else 8)


def available_bytes() -> int | None:
    """Memory this process may still take, in bytes; None where the system does not say.

    The least of what the kernel calls available and what the control group (a container's limit) leaves.
    """
    candidates = [value for value in (_from_meminfo(), _from_control_group()) if value is not None]
    if not candidates:
        return _from_sysconf()
    return min(candidates)


def require_room(n: int, *, is_complex: bool, what: str) -> None:
    """Refuse a matrix whose run would not fit, before anything is allocated.

    Raises
    ------
    InputError
        With the dense size, the estimate for a run, and the memory available.
    """
    room = available_bytes()
    need = run_bytes(n, is_complex=is_complex)
    if need > (ASSUMED_BYTES if room is None else room):
        dense = n * n * (16 if is_complex else 8)
        raise InputError(
            f"{what} is {n} × {n}: {readable_size(dense)} as a dense {'complex' if is_complex else 'real'} matrix and "
            f"about {readable_size(need)} for a run, but {_room_text(room)}; use a smaller model or a machine with "
            f"more memory"
        )


def require_memory(need: int, *, what: str) -> None:
    """Refuse data that would expand to more bytes than there is memory, before it is expanded.

    Raises
    ------
    InputError
        With the expanded size and the memory available.
    """
    room = available_bytes()
    if need > (ASSUMED_BYTES if room is None else room):
        raise InputError(f"{what} expands to {readable_size(need)}, but {_room_text(room)}; use a smaller file")


def readable_size(count: int) -> str:
    """A byte count to 3 digits with a decimal unit, e.g. ``320 GB``."""
    value = float(count)
    for unit in ("bytes", "kB", "MB", "GB", "TB", "PB"):
        if value < 999.5 or unit == "PB":
            break
        value /= 1000.0
    return f"{value:.3g} {unit}" if value < 1000 else f"{value:.0f} {unit}"


def _room_text(room: int | None) -> str:
    if room is None:
        return f"this system does not tell its memory and {readable_size(ASSUMED_BYTES)} is assumed"
    return f"{readable_size(room)} of memory is available"


def _from_meminfo() -> int | None:
    try:
        lines = Path("/proc/meminfo").read_text(encoding="ascii").splitlines()
    except (OSError, UnicodeDecodeError):
        return None
    for line in lines:
        if line.startswith("MemAvailable:"):
            return int(line.split()[1]) * 1024
    return None


def _from_control_group() -> int | None:
    # Version 2 first, then version 1; "max" and absurdly large numbers both mean that no limit is set.
    for limit_name, used_name in (
        ("/sys/fs/cgroup/memory.max", "/sys/fs/cgroup/memory.current"),
        ("/sys/fs/cgroup/memory/memory.limit_in_bytes", "/sys/fs/cgroup/memory/memory.usage_in_bytes"),
    ):
        try:
            limit = int(Path(limit_name).read_text(encoding="ascii"))
            used = int(Path(used_name).read_text(encoding="ascii"))
        except (OSError, ValueError):
            continue
        return max(limit - used, 0)
    return None


def _from_sysconf() -> int | None:
    try:
        return int(os.sysconf("SC_PAGE_SIZE")) * int(os.sysconf("SC_PHYS_PAGES"))
    except (AttributeError, OSError, ValueError):
        return None
