"""The working matrix: what every later room receives."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

__all__ = ["WorkingMatrix", "array_sha256"]


@dataclass(frozen=True, slots=True, eq=False)
class WorkingMatrix:
    """A square matrix accepted for work, with where it came from.

    Attributes
    ----------
    array : (n, n) ndarray of float64 or complex128
        Row-major, finite, write-protected; the user's own array is never touched.
    name : str
        Short name for titles and default file names.
    source : str
        File path, or a few words on the object it was taken from.
    labels : tuple of str, or None
        One name a state (row and column), where the source has them.
    notes : tuple of str
        What was done on the way in, e.g. widening from float32; each is a sentence.
    file_sha256 : str or None
        SHA-256 of the file's bytes; None when the matrix did not come from a file.
    key : str or None
        Name of the array inside the file, for ``.npz`` and ``.mat``: with it the same matrix can be loaded again.
    sha256 : str
        SHA-256 over dtype, shape and the little-endian row-major bytes of the array.
    """

    array: npt.NDArray[np.float64] | npt.NDArray[np.complex128]
    name: str = "matrix"
    source: str = "array"
    labels: tuple[str, ...] | None = None
    notes: tuple[str, ...] = ()
    file_sha256: str | None = None
    key: str | None = None
    sha256: str = field(init=False)

    def __post_init__(self) -> None:
        self.array.setflags(write=False)
        object.__setattr__(self, "sha256", array_sha256(self.array))

    @property
    def n(self) -> int:
        """Order of the matrix."""
        return int(self.array.shape[0])

    @property
    def is_real(self) -> bool:
        """Whether the entries are float64."""
        return self.array.dtype == np.float64

    def label(self, state: int) -> str:
        """Name of a state, or its number where the source had no names."""
        return self.labels[state] if self.labels is not None else f"state {state}"


def array_sha256(array: npt.NDArray[np.float64] | npt.NDArray[np.complex128]) -> str:
    """SHA-256 over ``dtype|shape|`` and the little-endian row-major bytes: the same on every machine."""
    little = np.ascontiguousarray(array).astype(array.dtype.newbyteorder("<"), copy=False)
    digest = hashlib.sha256(f"{array.dtype.name}|{'x'.join(map(str, array.shape))}|".encode())
    digest.update(little.tobytes())
    return digest.hexdigest()
