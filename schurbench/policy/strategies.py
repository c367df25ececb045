"""Shift strategies: each proposes the shifts of the next sweep from a read-only view of the active window.

A strategy of one's own is any object with a ``shifts(view)`` method that returns one shift (an explicit single-shift
step), two (a double-shift sweep) or more (taken two by two), in the working units of H. In real form one shift must be
real, and every two must both be real or conjugate. Optional attributes: ``name`` (shown in results), ``form`` (``"real"``
or ``"complex"``, what ``form="auto"`` means for a real matrix), ``exceptional`` (False to stay pure unless the caller
asks otherwise), and a method ``deflation_window(view)`` that returns how many rows of a deflation window to look into now,
or 0 to sweep; what the window leaves is in ``view.handed_on`` then.
"""

from __future__ import annotations

import cmath
from collections.abc import Sequence
from typing import Any, Protocol, runtime_checkable

from schurbench.errors import SettingsError
from schurbench.measures import Array

__all__ = [
    "Francis",
    "Given",
    "Rayleigh",
    "ShiftStrategy",
    "Wilkinson",
    "WindowView",
    "Zero",
]


class WindowView:
    """What a strategy may see.

    Attributes
    ----------
    window : (int, int)
        Half-open active window; at least two rows.
    waited : int
        Sweeps since the last deflation.
    sweep : int
        Sweeps done so far in the whole run.
    real : bool
        Whether H is real.
    found : float or None
        Share of the last deflation window that deflated; None when none was looked into since the last sweep.
    handed_on : tuple of complex
        Eigenvalues the last deflation window left, most promising first, conjugates side by side.
    """

    __slots__ = ("_planes", "found", "handed_on", "real", "sweep", "waited", "window")

    def __init__(self, planes: Array) -> None:
        self._planes = planes.view()
        self._planes.setflags(write=False)
        self.real = planes.ndim == 2
        self.window = (0, planes.shape[-1])
        self.waited = 0
        self.sweep = 0
        self.found: float | None = None
        self.handed_on: tuple[complex, ...] = ()

    @property
    def H(self) -> Array:
        """The whole Hessenberg matrix, in working units, (n, n), write-protected; for one entry `entry` is quicker."""
        H: Array = self._planes if self.real else self._planes[0] + 1j * self._planes[1]
        H.setflags(write=False)
        return H

    def entry(self, i: int, j: int) -> Any:
        """h[i, j] as a Python float or complex."""
        item = self._planes.item
        return item(i, j) if self.real else complex(item(0, i, j), item(1, i, j))

    def trailing(self) -> tuple[Any, Any, Any, Any]:
        """Entries a, b, c, d of the trailing 2×2 block [a b; c d] of the window, as Python numbers."""
        entry, i = self.entry, self.window[1] - 2
        return entry(i, i), entry(i, i + 1), entry(i + 1, i), entry(i + 1, i + 1)


@runtime_checkable
class ShiftStrategy(Protocol):
    """What the iteration asks of a shift strategy."""

    def shifts(self, view: WindowView) -> Sequence[complex]:
        """Propose one or two shifts for the next sweep, in the working units of H."""
        ...


def _nearer_eigenvalue(a: complex, b: complex, c: complex, d: complex) -> complex:
    """Eigenvalue of [a b; c d] nearer to d, without cancellation (Golub & Van Loan, 4th ed., §8.3.5, made complex)."""
    product = b * c
    if product == 0:
        return d
    half = (a - d) / 2
    root = cmath.sqrt(half * half + product)
    # of ± the one that does not cancel; for a tie, as with a conjugate pair, the upper half-plane by convention
    plus, minus = half + root, half - root
    pivot = plus if abs(plus) > abs(minus) or (abs(plus) == abs(minus) and (d - product / plus).imag >= 0) else minus
    return d - product / pivot if pivot != 0 else d


class Zero:
    """No shift at all: the plain QR iteration, whose rates are ratios of eigenvalue moduli."""

    name = "zero"
    form = "real"
    exceptional = False

    def shifts(self, view: WindowView) -> tuple[complex, ...]:
        """Return (0,)."""
        return (0.0,)


class Rayleigh:
    """The last diagonal entry of the window: quadratic near a simple eigenvalue, never complex on a real matrix."""

    name = "rayleigh"
    form = "real"
    exceptional = True

    def shifts(self, view: WindowView) -> tuple[complex, ...]:
        """Return the Rayleigh quotient of the last basis vector."""
        last = view.window[1] - 1
        return (view.entry(last, last),)


class Wilkinson:
    """The eigenvalue of the trailing 2×2 block nearer to the last diagonal entry (Wilkinson 1965, ch. 8)."""

    name = "wilkinson"
    form = "complex"
    exceptional = True

    def shifts(self, view: WindowView) -> tuple[complex, ...]:
        """Return one eigenvalue of the trailing 2×2 block."""
        return (_nearer_eigenvalue(*view.trailing()),)


class Francis:
    """Both eigenvalues of the trailing 2×2 block (Francis 1962): a double shift that keeps real matrices real.

    Parameters
    ----------
    real_pair : {"both", "nearer"}
        What to do when the block has two real eigenvalues: use both, or the one nearer to the last diagonal entry
        twice, which breaks some periodic orbits (the choice of LAPACK's dlahqr.f).
    """

    form = "real"
    exceptional = True

    def __init__(self, real_pair: str = "both") -> None:
        if real_pair not in ("both", "nearer"):
            raise SettingsError(f"real_pair {real_pair!r} is unknown; choose 'both' or 'nearer'")
        self.real_pair = real_pair
        self.name = "francis" if real_pair == "both" else "francis, nearer real shift twice"

    def shifts(self, view: WindowView) -> tuple[complex, ...]:
        """Return both eigenvalues of the trailing 2×2 block."""
        a, b, c, d = view.trailing()
        near = _nearer_eigenvalue(a, b, c, d)
        if view.real:
            if near.imag != 0.0:
                return (near, near.conjugate())
            near = near.real
        elif view.window[1] - view.window[0] == 2:
            # both eigenvalues of a 2×2 window make (H − σ₁I)(H − σ₂I) = 0: the second step would undo the first
            return (near,)
        if self.real_pair == "nearer":
            return (near, near)
        far = a + d - near
        return (near, far)


class Given:
    """A list of shifts, taken in order and then again from its start.

    Parameters
    ----------
    values : sequence of complex
        In the working units of H (those of the matrix, unless it was scaled). In real form a complex shift is used
        together with its conjugate in one double-shift sweep.

    Raises
    ------
    SettingsError
        Empty list, or values that are not finite numbers.
    """

    name = "given"
    exceptional = False

    def __init__(self, values: Sequence[complex]) -> None:
        try:
            self.values = tuple(complex(v) for v in values)
        except (TypeError, ValueError):
            raise SettingsError(
                "the shifts given are not a list of numbers; pass for example shifts=[1.0, 2.5]"
            ) from None
        if not self.values:
            raise SettingsError("strategy 'given' needs at least one shift; pass shifts=[...]")
        if not all(cmath.isfinite(v) for v in self.values):
            raise SettingsError("a given shift is NaN or infinite; give finite numbers")
        self.form = "real" if self._closed() else "complex"
        self._real_sweeps = self._pairs() if self.form == "real" else ()

    def _closed(self) -> bool:
        left = [v for v in self.values if v.imag != 0.0]
        for v in list(left):
            if v in left:
                left.remove(v)
                if v.conjugate() not in left:
                    return False
                left.remove(v.conjugate())
        return not left

    def _pairs(self) -> tuple[tuple[complex, ...], ...]:
        """One entry a sweep in real arithmetic: a real shift alone, a complex one with its conjugate."""
        sweeps: list[tuple[complex, ...]] = []
        waiting: list[complex] = []
        for v in self.values:
            if v.imag == 0.0:
                sweeps.append((v.real,))
            elif v in waiting:
                waiting.remove(v)
            else:
                waiting.append(v.conjugate())
                sweeps.append((v, v.conjugate()))
        return tuple(sweeps)

    def shifts(self, view: WindowView) -> tuple[complex, ...]:
        """Return the next shift of the list; in real form the next real shift or conjugate pair."""
        if view.real:
            return self._real_sweeps[view.sweep % len(self._real_sweeps)]
        return (self.values[view.sweep % len(self.values)],)
