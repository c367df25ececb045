"""Time and memory that a run will need, from a measured model.

How the constants were measured: ``schurbench.iterate(a)`` with its default settings on Gaussian matrices, kernels
compiled beforehand, one BLAS thread, one process, on two shared x86-64 cores (CPython 3.11, numpy 2.4, scipy 1.17
with OpenBLAS). Wall time in seconds is the median of 1 to 7 runs an order; memory is the peak that ``tracemalloc``
sees during one run, which leaves out the interpreter and its libraries.

=========  ======  =====  =====  =====  =====  =====  =====
form       n = 50    100    200    300    500   1000
=========  ======  =====  =====  =====  =====  =====  =====
real       0.0014  .0039  .0182  .0480   .325   1.72
model      0.0014  .0043   .020   .059   .250   1.92
complex    0.0036   .015  .0849   .257   1.21
model      0.0037   .015   .086   .272   1.21
=========  ======  =====  =====  =====  =====  =====  =====

Peak memory over n² numbers: 18.5 (n = 100), 24.2 (200), 36.0 (400) and 51.6 (700) in real form, 30.2 (100), 42.3 (250)
and 58.3 (400) in complex form; the model gives 18.2, 24.2, 36.2, 54.2 and 28.4, 42.4, 58.4. Other machines
differ by a factor of a few, other matrices by the number of sweeps they need.
"""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["Estimate", "estimate"]

#: Seconds a row (work of the interpreter) and seconds a row cubed (arithmetic), by form.
_SECONDS = {"real": (2.4e-5, 1.9e-9), "complex": (5.0e-5, 9.5e-9)}

#: Sweeps an eigenvalue of a Gaussian matrix, by form.
_SWEEPS = {"real": 1.9, "complex": 3.3}

#: Matrices of order n alive at the peak, checkpoints and recorded bands apart.
_MATRICES = 6.5

#: The journal keeps H and Z at the start and every 64 sweeps as long as ``keep`` (256 MiB by default) allows, and three
#: bands after every sweep.
_CHECKPOINT_SWEEPS = 64
_KEEP = 256 * 2**20


@dataclass(frozen=True, slots=True)
class Estimate:
    """What a run with the default settings will need.

    Attributes
    ----------
    seconds : float
        Wall time.
    memory : int
        Bytes at the peak, without the interpreter and its libraries.
    """

    seconds: float
    memory: int


def estimate(n: int, *, real: bool) -> Estimate:
    """Estimated wall time and peak memory of a run of order n in real or complex form."""
    form = "real" if real else "complex"
    row, cube = _SECONDS[form]
    item = 8 if real else 16
    sweeps = _SWEEPS[form] * n
    checkpoints = min(_KEEP, 2.0 * item * n * n * (1 + sweeps // _CHECKPOINT_SWEEPS))
    bands = min(_KEEP, 3.0 * item * n * sweeps)
    return Estimate(row * n + cube * n**3, int(_MATRICES * item * n * n + checkpoints + bands))
