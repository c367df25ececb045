"""Values that JSON can carry, and numbers as a sentence shows them."""

from __future__ import annotations

import math
from collections.abc import Mapping
from enum import Enum
from typing import Any

import numpy as np

__all__ = ["number", "plain", "plural", "ten_to"]


def plain(value: Any) -> Any:
    """The same value made of JSON's own types only.

    NumPy scalars become Python numbers, arrays and tuples lists, complex numbers ``[real, imaginary]``. JSON has no
    infinities, so they become the strings ``"inf"`` and ``"-inf"``; NaN becomes None.
    """
    if value is None or isinstance(value, (bool, np.bool_)):
        return value if value is None else bool(value)
    if isinstance(value, Enum):
        return plain(value.value)
    if isinstance(value, str):
        return str(value)
    if isinstance(value, (int, np.integer)):
        return int(value)
    if isinstance(value, (float, np.floating)):
        number = float(value)
        if math.isnan(number):
            return None
        return number if math.isfinite(number) else ("inf" if number > 0 else "-inf")
    if isinstance(value, (complex, np.complexfloating)):
        return [plain(float(value.real)), plain(float(value.imag))]
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, np.ndarray):
        return [plain(item) for item in value.tolist()]
    if isinstance(value, (list, tuple, range)):
        return [plain(item) for item in value]
    raise TypeError(f"{type(value).__name__} has no JSON form")


_SUPERSCRIPTS = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


def number(value: float, digits: int = 3) -> str:
    """A number for a sentence: 3 significant digits, powers of ten written out, as in ``2.5·10⁻⁷``."""
    value = float(value)
    if math.isnan(value):
        return "not a number"
    if math.isinf(value):
        return "infinite" if value > 0 else "minus infinite"
    if value == 0.0:
        return "0"
    mantissa, exponent = f"{value:.{digits - 1}e}".split("e")
    power = int(exponent)
    if -3 <= power < 5:
        text = f"{abs(value):.{digits}g}"
        text = f"{float(text):.0f}" if "e" in text else text
        return f"−{text}" if value < 0 else text
    mantissa = mantissa.rstrip("0").rstrip(".") if "." in mantissa else mantissa
    raised = "10" + str(power).translate(_SUPERSCRIPTS)
    return {"1": raised, "-1": f"−{raised}"}.get(mantissa, f"{mantissa.replace('-', '−')}·{raised}")


def ten_to(decades: float) -> str:
    """A ratio given by its decades, as `number` writes it, beyond the range of a double too."""
    if abs(decades) < 300.0:
        return number(10.0**decades)
    return "10" + str(round(decades)).translate(_SUPERSCRIPTS)


def plural(count: int, one: str, many: str | None = None) -> str:
    """``"1 row"``, ``"3 rows"``: the count with the right form of the noun."""
    return f"{count} {one if count == 1 else many or one + 's'}"
