"""What a healthy iteration looks like, in numbers measured on this project's own kernels.

Measured on 409 runs of each of four kinds of matrix for every line: Gaussian, Gaussian Hessenberg, uniform, and random
sparse ones (four entries a row and a diagonal), orders 5 to 200, default settings, one seed. ``sweeps`` is the range
over the kinds of the medians of sweeps an eigenvalue at orders 50 to 200; ``most`` is the most seen at order 50 and
above; ``longest wait`` the longest stretch of sweeps without a deflation in any run. At order 5 the first sweeps weigh
more: up to 3.4 (double shift), 4.0 (single shift) and 5.0 (Rayleigh) sweeps an eigenvalue were seen, which the fixed
allowance of 10 sweeps covers. The complex Rayleigh line is from dense complex matrices only.

====================================  ===========  =====  ============
shifts                                sweeps       most   longest wait
====================================  ===========  =====  ============
double shift, real form               1.65 – 2.01  2.22   15
single shift, complex form            2.89 – 3.41  3.60   12
two single shifts, complex form       2.06 – 2.26  2.41   16
Rayleigh, complex matrix              3.83 – 4.06  4.34   18
Rayleigh, real symmetric matrix       2.66 – 2.72  2.96   10
====================================  ===========  =====  ============

Symmetric and Hermitian matrices need fewer: 1.2 – 1.3 (double) and 2.05 – 2.2 (single), longest wait 8.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from schurbench.journal import Run

__all__ = ["ALLOWANCE", "HealthyFigures", "healthy_figures"]

#: Order up to which multishift takes no more than two shifts a sweep (`schurbench.policy.multishift`).
_LEFT_TO_FEW = 100

#: Sweeps allowed on top of the sweeps an eigenvalue, whatever the order.
ALLOWANCE = 10


@dataclass(frozen=True, slots=True)
class HealthyFigures:
    """What a healthy run of one kind of shift needs.

    Attributes
    ----------
    kind : str
        The kind of shift, for a sentence.
    sweeps : (float, float)
        Usual range of sweeps an eigenvalue.
    most : float
        Sweeps an eigenvalue beyond which, after `ALLOWANCE`, a run is not healthy.
    longest_wait : int
        Longest stretch without a deflation seen in a healthy run.
    """

    kind: str
    sweeps: tuple[float, float]
    most: float
    longest_wait: int

    @property
    def trouble_wait(self) -> int:
        """Sweeps without a deflation from which a stretch is trouble: a third more than the longest healthy one."""
        return -(-4 * self.longest_wait // 3)

    def most_sweeps(self, n: int) -> float:
        """Sweeps beyond which a run of order n is not healthy."""
        return self.most * n + ALLOWANCE


_DOUBLE_REAL = HealthyFigures("double shift in real form", (1.65, 2.01), 2.4, 15)
_SINGLE_COMPLEX = HealthyFigures("single shift in complex form", (2.89, 3.41), 3.8, 15)
_TWO_COMPLEX = HealthyFigures("two single shifts a sweep in complex form", (2.06, 2.26), 2.6, 16)
_RAYLEIGH_COMPLEX = HealthyFigures("Rayleigh shift in complex form", (3.83, 4.06), 4.6, 18)
_SINGLE_REAL = HealthyFigures("real single shift", (2.66, 2.72), 3.2, 15)


def _many_shifts(n: int, real: bool) -> HealthyFigures:
    """Many shifts a sweep take about as many sweeps in all whatever the order, most of them for the last 100 rows.

    Medians, and most, of sweeps in all, over 8 to 80 runs each on the four kinds of matrix above (order 1000: 8 runs):

    =======  ===========  ===========  ===========  ===========  ===========
    order    130          200          300          500          1000
    =======  ===========  ===========  ===========  ===========  ===========
    real     182 (210)    188 (212)    184 (218)    186 (211)    180 (188)
    complex  315 (335)    312 (331)    308 (337)    309 (349)    295 (308)
    =======  ===========  ===========  ===========  ===========  ===========

    The longest wait was 16 sweeps (real) and 10 (complex).
    """
    if real:
        return HealthyFigures("sweep with many shifts in real form", (155.0 / n, 215.0 / n), 260.0 / n, 16)
    return HealthyFigures("sweep with many shifts in complex form", (275.0 / n, 345.0 / n), 400.0 / n, 12)


def healthy_figures(run: Run) -> HealthyFigures:
    """The figures a run is held against: those of its kind of shift where that kind is sound for its form.

    Zero shifts and a given list have no healthy figures of their own; they are held against the usual strategy of their
    form, because that is what the engineer could have instead.
    """
    if run.settings.strategy == "multishift" and run.n > _LEFT_TO_FEW:
        return _many_shifts(run.n, run.settings.form == "real")
    swept = [step for step in run.steps if step.shifts]
    double = sum(len(step.shifts) == 2 for step in swept) * 2 > len(swept)
    if run.settings.form == "real":
        return _DOUBLE_REAL if double or not swept or run.settings.strategy in ("zero", "given") else _SINGLE_REAL
    if run.settings.strategy == "rayleigh":
        return _RAYLEIGH_COMPLEX
    return _TWO_COMPLEX if double else _SINGLE_COMPLEX
