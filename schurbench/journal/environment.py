"""What a run was made with: everything that may change the last bits of a result."""

from __future__ import annotations

import os
import platform
import sys
from functools import cache
from importlib.metadata import PackageNotFoundError, version
from typing import Any

__all__ = ["environment"]


@cache
def _fixed() -> dict[str, Any]:
    from threadpoolctl import threadpool_info

    versions = {"python": platform.python_version()}
    for package in ("schurbench", "numpy", "scipy", "numba"):
        try:
            versions[package] = version(package)
        except PackageNotFoundError:
            versions[package] = "unknown"
    blas = [
        {
            "library": pool.get("internal_api", "unknown"),
            "version": pool.get("version") or "unknown",
            "kernel": pool.get("architecture", "unknown"),
        }
        for pool in threadpool_info()
        if pool.get("user_api") == "blas"
    ]
    return {
        "versions": versions,
        "blas": blas,
        "platform": platform.platform(),
        "machine": platform.machine(),
        "byte_order": sys.byteorder,
        "cpu": _cpu_target(),
    }


def _cpu_target() -> str:
    """Processor name that numba compiles for."""
    named = os.environ.get("NUMBA_CPU_NAME")
    if named:
        return named
    import llvmlite.binding

    return str(llvmlite.binding.get_host_cpu_name())


def environment() -> dict[str, Any]:
    """Versions, BLAS kernels, threads and processor, JSON-ready."""
    return {**_fixed(), "threads": {"blas": 1, "kernels": 1}, "cpus": os.cpu_count()}
