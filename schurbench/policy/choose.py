"""From the ``strategy`` keyword to an object."""

from __future__ import annotations

from collections.abc import Sequence

from schurbench.errors import SettingsError
from schurbench.policy.multishift import Multishift
from schurbench.policy.strategies import Francis, Given, Rayleigh, ShiftStrategy, Wilkinson, Zero

__all__ = ["BUILT_IN", "MULTISHIFT_FROM", "STRATEGIES", "strategy_for"]

#: Order from which ``auto`` takes many shifts a sweep; below, single and double shifts are as fast (tests/benchmarks).
MULTISHIFT_FROM = 256

#: Strategies whose proposals need no check: they cannot be anything but usable.
BUILT_IN = (Zero, Rayleigh, Wilkinson, Francis, Multishift)

STRATEGIES = ("auto", "zero", "rayleigh", "wilkinson", "francis", "multishift", "given")

_SIMPLE: dict[str, type] = {
    "zero": Zero,
    "rayleigh": Rayleigh,
    "wilkinson": Wilkinson,
    "francis": Francis,
    "multishift": Multishift,
}


def strategy_for(
    strategy: str | ShiftStrategy, *, n: int, real: bool, shifts: Sequence[complex] | None = None
) -> ShiftStrategy:
    """Turn the ``strategy`` keyword into an object.

    Parameters
    ----------
    strategy : str or ShiftStrategy
    n : int
        Order of the matrix.
    real : bool
        Whether the run will be in real arithmetic where that is possible. ``auto`` chooses multishift from order
        `MULTISHIFT_FROM` on; below, francis in real arithmetic and wilkinson otherwise.
    shifts : sequence of complex, optional
        For ``given`` only.

    Raises
    ------
    SettingsError
        Unknown name, missing or superfluous ``shifts``, or an object without a ``shifts`` method.
    """
    if strategy == "given":
        if shifts is None:
            raise SettingsError("strategy 'given' needs its list of shifts; pass shifts=[...]")
        return Given(shifts)
    if shifts is not None:
        raise SettingsError("shifts are only used by strategy 'given'; name that strategy or leave shifts out")
    if isinstance(strategy, str):
        if strategy == "auto":
            if n >= MULTISHIFT_FROM:
                return Multishift()
            return Francis() if real else Wilkinson()
        if strategy in _SIMPLE:
            made: ShiftStrategy = _SIMPLE[strategy]()
            return made
        raise SettingsError(
            f"strategy {strategy!r} is unknown; choose one of {', '.join(STRATEGIES)}, or pass an object"
        )
    if not callable(getattr(strategy, "shifts", None)):
        raise SettingsError(
            f"strategy of type {type(strategy).__name__} has no shifts(view) method; see schurbench.policy.ShiftStrategy"
        )
    return strategy
