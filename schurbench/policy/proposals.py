"""Which proposals of a strategy can be carried out."""

from __future__ import annotations

import cmath
from collections.abc import Sequence

from schurbench.errors import SettingsError

__all__ = ["checked_proposal"]

#: Largest single shift accepted, in Frobenius norms of H. No eigenvalue lies beyond one norm, and an explicit step with
#: shift σ makes rounding errors of size ulp·|σ|, so a larger shift can only spoil the backward error.
_LARGEST_SHIFT = 4.0


def checked_proposal(shifts: Sequence[complex], real: bool, norm: float) -> Sequence[complex]:
    """What a strategy of the user's own, or a list of shifts, may propose.

    Parameters
    ----------
    shifts : sequence of complex
    real : bool
        Whether H is real.
    norm : float
        Frobenius norm of H.

    Raises
    ------
    SettingsError
        Anything that cannot be carried out: no numbers, not finite, not conjugate in real form, far beyond the norm.
    """
    try:
        values = [complex(s) for s in shifts]
    except (TypeError, ValueError):
        raise SettingsError(f"the strategy proposed {shifts!r}; return a sequence of one or two numbers") from None
    if not values or (real and len(values) > 1 and len(values) % 2):
        raise SettingsError(
            f"the strategy proposed {len(values)} shifts; return one or two, or in real form an even number"
        )
    if not all(cmath.isfinite(v) for v in values):
        raise SettingsError("the strategy proposed a shift that is NaN or infinite; return finite numbers")
    pairs = [values[i : i + 2] for i in range(0, len(values), 2)] if real else []
    if any(
        len(pair) == 2 and (pair[0].imag != 0.0 or pair[1].imag != 0.0) and pair[0] != pair[-1].conjugate()
        for pair in pairs
    ):
        raise SettingsError(
            "the strategy proposed complex shifts that are no conjugate pair; return pairs or use form='complex'"
        )
    if any(len(pair) == 1 and pair[0].imag != 0.0 for pair in pairs):
        raise SettingsError(
            "the strategy proposed one complex shift in real form; return its conjugate too or use form='complex'"
        )
    largest = max(abs(v) for v in values)
    if largest > _LARGEST_SHIFT * norm:
        raise SettingsError(
            f"a shift of magnitude {largest:.3g} is {largest / norm if norm else float('inf'):.3g} times the "
            f"norm of H; no eigenvalue lies beyond 1, so choose shifts within {_LARGEST_SHIFT:g} norms"
        )
    return values
