"""Exceptional shifts: what to try when the ordinary shifts lead nowhere."""

from __future__ import annotations

import cmath

from schurbench.policy.strategies import WindowView

__all__ = ["EXCEPTIONAL_PERIOD", "exceptional_shifts"]

#: Sweeps without a deflation after which one exceptional shift is taken (Reference-LAPACK dlahqr.f, KEXSH).
EXCEPTIONAL_PERIOD = 10

# The factors that LAPACK inherited from EISPACK's hqr (dlahqr.f, DAT1 and DAT2). They have no theory behind them; any
# values that break the symmetry of a stalled window would serve.
_DIAGONAL = 0.75
_PRODUCT = -0.4375


def exceptional_shifts(view: WindowView, turn: int, count: int, real: bool) -> tuple[complex, ...]:
    """Shifts that depend on subdiagonal sizes instead of eigenvalue estimates.

    Parameters
    ----------
    view : WindowView
    turn : int
        How many exceptional shifts this window has had; even turns look at the bottom of the window, odd ones at the
        top, as dlahqr.f does, because either end may be the one that is stuck.
    count : int
        How many the ordinary proposal had; one is returned for one, two for more.
    real : bool
        Whether a single shift must be real.
    """
    entry, (lo, hi) = view.entry, view.window
    if turn % 2 == 0:
        corner = complex(entry(hi - 1, hi - 1))
        size = abs(entry(hi - 1, hi - 2)) + (abs(entry(hi - 2, hi - 3)) if hi - lo > 2 else 0.0)
    else:
        corner = complex(entry(lo, lo))
        size = abs(entry(lo + 1, lo)) + (abs(entry(lo + 2, lo + 1)) if hi - lo > 2 else 0.0)
    centre = corner + _DIAGONAL * float(size)
    if count == 1:
        return (complex(centre.real),) if real else (centre,)
    spread = cmath.sqrt(_PRODUCT) * float(size)
    return (centre + spread, centre - spread)
