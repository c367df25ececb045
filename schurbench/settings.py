"""Settings as a caller writes them, and as they will be carried out: everything that cannot be is refused here."""

from __future__ import annotations

from collections.abc import Sequence
from numbers import Real
from typing import Any

import numpy as np

from schurbench.errors import SettingsError
from schurbench.intake import WorkingMatrix
from schurbench.journal.records import Settings
from schurbench.journal.run import Run
from schurbench.policy import (
    BUILT_IN,
    EXCEPTIONAL_PERIOD,
    Francis,
    Given,
    ShiftStrategy,
    Wilkinson,
    deflation_test,
    strategy_for,
)
from schurbench.prepare.preparation import BALANCE_CHOICES

__all__ = ["check_limits", "recorded_strategy", "resolve"]


def resolve(
    matrix: WorkingMatrix,
    strategy: str | ShiftStrategy,
    form: str,
    balance: str,
    flip: bool,
    deflation: str,
    tol: float | None,
    exceptional: bool | int | None,
    accumulate: bool,
    limit: int | None,
    stop_when_stalled: bool,
    keep: str | int,
    shifts: Sequence[complex] | None,
) -> tuple[ShiftStrategy, Settings]:
    """Settings as they will be carried out; everything that cannot be is refused here, before any work."""
    if form not in ("auto", "real", "complex"):
        raise SettingsError(f"form {form!r} is unknown; choose 'auto', 'real' or 'complex'")
    if balance not in BALANCE_CHOICES:
        raise SettingsError(f"balance {balance!r} is unknown; choose one of {', '.join(BALANCE_CHOICES)}")
    if form == "real" and not matrix.is_real:
        raise SettingsError("a complex matrix has no real Schur form; use form='complex' or form='auto'")
    real = matrix.is_real and form != "complex"
    policy = strategy_for(strategy, n=matrix.n, real=real, shifts=shifts)
    if real and form == "auto":
        real = getattr(policy, "form", "real") == "real"
    if real and isinstance(policy, Wilkinson) and not np.array_equal(matrix.array, matrix.array.T):
        raise SettingsError(
            "wilkinson shifts of a real matrix that is not symmetric may be complex; use form='complex' or strategy 'francis'"
        )
    if real and isinstance(policy, Given) and policy.form == "complex":
        raise SettingsError(
            "the given shifts are not closed under conjugation; add the conjugates or use form='complex'"
        )
    deflation_test(deflation)
    check_limits(limit, stop_when_stalled)
    switches: dict[str, Any] = {"flip": flip, "accumulate": accumulate}
    for name, value in switches.items():
        _check_switch(name, value)
    level: Any = tol  # whatever a caller may have passed
    if level is not None and (
        isinstance(level, bool) or not isinstance(level, Real) or not 0.0 <= float(level) < float("inf")
    ):
        raise SettingsError(f"tol {tol!r} is no level; give a number of at least 0, or None for rounding level")
    if exceptional is None:
        period = EXCEPTIONAL_PERIOD if getattr(policy, "exceptional", True) else 0
    elif isinstance(exceptional, bool):
        period = EXCEPTIONAL_PERIOD if exceptional else 0
    elif isinstance(exceptional, (int, np.integer)) and exceptional >= 0:
        period = int(exceptional)
    else:
        raise SettingsError(f"exceptional {exceptional!r} is unknown; give True, False or a number of sweeps")
    options: dict[str, Any] = {}
    if isinstance(policy, Given):
        options["shifts"] = [[v.real, v.imag] for v in policy.values]
    if isinstance(policy, Francis) and policy.real_pair != "both":
        options["real_pair"] = policy.real_pair
    if type(policy) not in (*BUILT_IN, Given):
        options["own"] = type(policy).__qualname__
    return policy, Settings(
        strategy=str(getattr(policy, "name", type(policy).__name__)),
        form="real" if real else "complex",
        balance=balance,
        flip=bool(flip),
        deflation=deflation,
        tol=None if tol is None else float(tol),
        exceptional=period,
        accumulate=bool(accumulate),
        limit=30 * max(10, matrix.n) if limit is None else int(limit),
        stop_when_stalled=bool(stop_when_stalled),
        keep=_bytes(keep),
        options=options,
    )


def _check_switch(name: str, value: Any) -> None:
    if not isinstance(value, (bool, np.bool_)):
        raise SettingsError(f"{name} {value!r} is neither True nor False; give one of them")


def check_limits(limit: Any, stop_when_stalled: Any) -> None:
    _check_switch("stop_when_stalled", stop_when_stalled)
    if limit is not None and (isinstance(limit, bool) or not isinstance(limit, (int, np.integer)) or limit < 1):
        raise SettingsError(f"limit {limit!r} is no number of sweeps; give an integer of at least 1")


def recorded_strategy(run: Run, own: ShiftStrategy | None) -> ShiftStrategy:
    """The strategy that a run was made with, from its settings, or the user's own."""
    name, options = run.settings.strategy, run.settings.options
    if "own" in options:
        if own is None:
            raise SettingsError(
                f"the run was made with a strategy of your own, {name} ({options['own']}), which is not in the record; "
                "pass it again as strategy="
            )
        if isinstance(own, str) or not callable(getattr(own, "shifts", None)):
            raise SettingsError(f"strategy {own!r} has no shifts(view) method; pass the object the run was made with")
        offered = str(getattr(own, "name", type(own).__name__))
        if offered != name:
            raise SettingsError(f"the run was made with strategy {name}, not {offered}; pass the one it was made with")
        return own
    if own is not None:
        raise SettingsError(f"the run goes on with its strategy {name}, which is in the record; leave strategy out")
    if "shifts" in options:
        return Given([complex(*pair) for pair in options["shifts"]])
    if "real_pair" in options:
        return Francis(options["real_pair"])
    return strategy_for(name, n=run.n, real=run.settings.form == "real")


_UNITS = {"b": 1, "kib": 2**10, "mib": 2**20, "gib": 2**30, "kb": 10**3, "mb": 10**6, "gb": 10**9, "": 1}


def _bytes(keep: str | int) -> int:
    if isinstance(keep, (int, np.integer)) and not isinstance(keep, bool) and keep >= 0:
        return int(keep)
    if isinstance(keep, str):
        number = keep.strip().lower().rstrip("kmgib ")
        unit = keep.strip().lower()[len(number) :].strip()
        try:
            amount = float(number) * _UNITS[unit]
            if 0 <= amount < float("inf"):
                return int(amount)
        except (ValueError, KeyError):
            pass
    raise SettingsError(f"keep {keep!r} is no amount of memory; write for example '256 MiB'")
