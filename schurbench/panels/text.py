"""How numbers and rows are written in the panels: three digits, exponents as 10⁻⁷, half-open windows as row ranges."""

from __future__ import annotations

from schurbench.prepare.plain import number

__all__ = ["complex_number", "duration", "power", "rows"]


def power(exponent: int) -> str:
    """10 to an integer exponent, without a factor."""
    return number(10.0**exponent) if exponent else "10⁰"


def complex_number(value: complex) -> str:
    """Real and imaginary part to three digits; the imaginary part only where there is one."""
    if value.imag == 0:
        return number(value.real).replace("-", "−")
    imaginary = f"{number(abs(value.imag))}i"
    if value.real == 0:
        return ("−" if value.imag < 0 else "") + imaginary
    return f"{number(value.real).replace('-', '−')} {'−' if value.imag < 0 else '+'} {imaginary}"


def rows(window: tuple[int, int]) -> str:
    """A half-open window as the rows in it."""
    lo, hi = window
    if hi <= lo:
        return "no rows"
    return f"row {lo}" if hi == lo + 1 else f"rows {lo} to {hi - 1}"


def duration(seconds: float) -> str:
    """Seconds as a person would say them."""
    if seconds < 1.0:
        return f"{number(seconds * 1000.0)} ms"
    if seconds < 120.0:
        return f"{number(seconds)} s"
    return f"{number(seconds / 60.0)} min"
