"""What the page says in words about a matrix, about factors, and about a failure."""

from __future__ import annotations

from html import escape
from typing import Any

import traitlets as t

from schurbench.errors import SchurbenchError
from schurbench.intake import WorkingMatrix
from schurbench.panels.colours import CHOSEN, CONVERGED
from schurbench.panels.text import duration
from schurbench.prepare.plain import number, plural

__all__ = ["head", "one_line", "verdict"]


def head(matrix: WorkingMatrix, profile: Any) -> str:
    """The line about the matrix, which opens into its profile."""
    kind = "real" if matrix.is_real else "complex"
    remarks = profile.remarks or ("Nothing stands out.",)
    if profile.departure is None:
        departure = f"between {number(profile.departure_lower)} and {number(profile.departure_upper)}"
    else:
        departure = number(profile.departure)
    line = f"n = {matrix.n}, {kind}, ‖A‖<sub>F</sub> = {number(profile.norm_frobenius)}. {escape(remarks[0])}"
    facts = [
        ("source", matrix.source),
        ("structure", ", ".join(profile.structures) or "none to rounding"),
        ("departure from normality", f"{departure} of the norm"),
        ("balancing", f"shrinks the 1-norm by a factor of {number(profile.balance_factor)}"),
        ("blocks after permuting", plural(profile.components, "block")),
        ("expected for a run", f"{duration(profile.seconds_estimate)}, {number(profile.memory_estimate / 2**20)} MiB"),
        ("SHA-256", matrix.sha256[:16] + " …"),
    ]
    table = "".join(f"<tr><td>{escape(name)}</td><td>{escape(value)}</td></tr>" for name, value in facts)
    more = "".join(f"<div>{escape(text)}</div>" for text in (*remarks[1:], *matrix.notes))
    return f"<details><summary><b>{escape(matrix.name)}</b>: {line}</summary>{more}<table>{table}</table></details>"


def verdict(factors: Any) -> str:
    """Whether factors passed, and how far they can be trusted."""
    certificate = factors.certificate()
    colour, glyph = (CONVERGED, "✔") if certificate.passed else (CHOSEN, "✘")
    lines = [f'<i style="color:{colour};font-style:normal">{glyph}</i> {escape(certificate.sentence)}']
    lines.extend(escape(text) for text in (*factors.notes, factors.trust))
    return "".join(f"<div>{line}</div>" for line in lines if line)


def one_line(failure: BaseException) -> str:
    """An exception in one line; the name of its class only where it is none of ours."""
    text = " ".join(str(failure).split())
    if isinstance(failure, (SchurbenchError, t.TraitError)):
        return text
    return f"{type(failure).__name__}: {text}" if text else type(failure).__name__
