"""Files that are either whole or not there."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path
from typing import BinaryIO

from schurbench.errors import InputError

__all__ = ["write_whole"]


def write_whole(path: Path, write: Callable[[BinaryIO], object], *, replace: bool) -> Path:
    """Write a file beside its place and move it there when it is complete.

    Parameters
    ----------
    path : Path
    write : callable
        Receives the open binary file.
    replace : bool
        Whether a file that exists may be replaced.

    Raises
    ------
    InputError
        The file exists and may not be replaced, or cannot be written there.
    """
    if path.exists() and not replace:
        raise InputError(f"{path} exists already; choose another name or allow it to be replaced")
    fresh = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        try:
            with fresh.open("xb") as stream:
                write(stream)
            fresh.replace(path)
        except BaseException:
            fresh.unlink(missing_ok=True)
            raise
    except OSError as error:
        raise InputError(f"{path} cannot be written ({error.strerror or error}); choose another place") from None
    return path
