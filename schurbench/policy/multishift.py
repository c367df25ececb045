"""Many shifts a sweep, with a deflation window looked into before each: the strategy for larger matrices.

Braman, Byers & Mathias, The multishift QR algorithm, parts I and II, SIAM J. Matrix Anal. Appl. 23 (2002). The shifts are
those eigenvalues of the deflation window that did not deflate. They are carried through the matrix as small bulges, one
pair after the other, so that none of them is blurred.
"""

from __future__ import annotations

from schurbench.policy.strategies import Francis, Wilkinson, WindowView

__all__ = ["Multishift"]

# The four numbers below were set together, on Gaussian matrices of n = 200 to 1000, real and complex, by the ratio to
# scipy.linalg.schur in one process, alternating, best of five. Windows from 30, 50, 75, 100 and 130 rows on gave 1.22, 1.18,
# 1.10, 1.09 and 1.06 at n = 300 and 1.03 to 1.05 at n = 1000; 6, 8, 10 or 12 rows a shift, windows of 1.25 to 2 times the
# shifts and shares of 0.12 to 0.3 moved it by less than 0.1.

#: Active windows below this are left to ordinary double or single shifts.
_SMALLEST = 100

#: Rows of the active window for each shift, and the most shifts a sweep.
_ROWS_A_SHIFT, _MOST_SHIFTS = 8, 64

#: Rows of the deflation window for each shift: one and a half as in part II, §3.
_WINDOW = 1.5

#: A window that deflates less than this share of itself is followed by a sweep; otherwise the next window comes first.
_SHARE = 0.3

#: Sweeps without a deflation after which windows are doubled (Reference-LAPACK dlaqr0.f, KEXNW).
_WIDEN_AFTER = 5


class Multishift:
    """Deflation windows, and sweeps with the eigenvalues they leave."""

    name = "multishift"
    form = "real"
    exceptional = True

    def __init__(self) -> None:
        self._double, self._single = Francis(), Wilkinson()

    def deflation_window(self, view: WindowView) -> int:
        """Rows of the deflation window to look into now; 0 to sweep instead."""
        rows: int = view.window[1] - view.window[0]
        if rows < _SMALLEST or (view.found is not None and view.found < _SHARE):
            return 0
        wide = 2 if view.waited >= _WIDEN_AFTER else 1
        return min(rows, wide * int(_WINDOW * _count(rows)))

    def shifts(self, view: WindowView) -> tuple[complex, ...]:
        """The best eigenvalues of the last deflation window; in a small window those of the trailing 2×2 block."""
        rows = view.window[1] - view.window[0]
        chosen = _paired(view.handed_on, view.real) if rows >= _SMALLEST and view.found is not None else ()
        chosen = chosen[: _count(rows)]
        if not chosen:
            return self._double.shifts(view) if view.real else self._single.shifts(view)
        return chosen


def _count(rows: int) -> int:
    """Shifts for an active window of so many rows; even."""
    return max(4, min(_MOST_SHIFTS, rows // _ROWS_A_SHIFT) // 2 * 2)


def _paired(values: tuple[complex, ...], real: bool) -> tuple[complex, ...]:
    """In real form conjugates side by side and real shifts two by two, so that every two make one bulge."""
    if not real:
        return values
    out: list[complex] = []
    single: complex | None = None
    for v in values:
        if v.imag > 0.0:
            out += [v, v.conjugate()]
        elif v.imag == 0.0:
            if single is None:
                single = v
            else:
                out += [single, v]
                single = None
    return tuple(out)
