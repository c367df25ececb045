"""Two small drawings for a page: sweeps waited over the steps, and the spectrum. Plain SVG text, nothing fetched."""

from __future__ import annotations

from html import escape
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from schurbench.prepare.plain import number

if TYPE_CHECKING:
    from schurbench.diagnosis.case import Case

__all__ = ["spectrum_drawing", "waiting_drawing"]

# Okabe and Ito 2008: blue, vermilion and bluish green stay apart for colour-blind readers; shape tells them apart too.
_BLUE, _VERMILION, _GREEN, _GREY = "#0072b2", "#d55e00", "#009e73", "#767676"

_WIDTH, _HEIGHT = 720, 170
_LEFT, _BOTTOM = 52, 28

#: Columns of the waiting drawing; with more steps a column shows the longest wait among them.
_COLUMNS = 640


def waiting_drawing(case: Case) -> str:
    """Sweeps waited since the last deflation, one column a step, with the healthy range shaded."""
    run = case.run
    waits = np.asarray(run.waits, dtype=np.float64)
    if not waits.size:
        return ""
    edges = np.linspace(0, waits.size, min(waits.size, _COLUMNS) + 1).astype(int)
    heights = np.maximum.reduceat(waits, edges[:-1])
    top = max(float(heights.max()), 1.25 * case.healthy.trouble_wait)
    inner_w, inner_h = _WIDTH - _LEFT - 8, _HEIGHT - _BOTTOM - 8

    def y(value: float) -> float:
        return round(8 + inner_h * (1 - value / top), 1)

    width = inner_w / heights.size
    bars = "".join(
        f"M{_LEFT + i * width:.1f} {y(0)}V{y(float(h))}h{max(width - 0.3, 0.4):.1f}V{y(0)}z"
        for i, h in enumerate(heights)
    )
    shade = y(case.healthy.trouble_wait)
    marks = "".join(
        f'<path d="M{_LEFT + (k - 0.5) * inner_w / waits.size:.1f} {y(0) + 2}l-3 5h6z" fill="{_VERMILION}"/>'
        for k in run.exceptional_steps[:400]
    )
    return _svg(
        "Sweeps waited for a deflation, over the steps of the run",
        f'<rect x="{_LEFT}" y="{shade}" width="{inner_w}" height="{y(0) - shade}" fill="{_GREEN}" opacity="0.12"/>'
        f'<path d="{bars}" fill="{_BLUE}"/>{marks}'
        f'<path d="M{_LEFT} {shade}h{inner_w}" stroke="{_GREEN}" stroke-dasharray="4 3" fill="none"/>'
        f"{_label(_LEFT - 6, y(0) + 4, '0', 'end')}"
        f"{_label(_LEFT - 6, shade + 4, str(case.healthy.trouble_wait), 'end')}"
        f"{_label(_LEFT - 6, 16, number(top), 'end') if top > 1.6 * case.healthy.trouble_wait else ''}"
        f"{_label(_LEFT, _HEIGHT - 6, 'step 1', 'start')}"
        f"{_label(_WIDTH - 8, _HEIGHT - 6, f'step {waits.size}', 'end')}",
        _HEIGHT,
    )


def spectrum_drawing(case: Case) -> str:
    """Eigenvalues in the complex plane: discs where they converged, crosses where the iteration had not finished."""
    run = case.run
    with np.errstate(over="ignore"):  # an eigenvalue may lie beyond the largest double; it is left out below
        values = run.to_matrix_units(case.eigenvalues)
    done = _finished(case)
    kept = np.isfinite(values)
    values, done = values[kept], done[kept]
    if not values.size:
        return ""
    height = 300
    x, y = _axis(values.real), _axis(values.imag)
    inner_w, inner_h = _WIDTH - _LEFT - 12, height - _BOTTOM - 10

    def place(value: complex) -> tuple[float, float]:
        return (
            round(_LEFT + inner_w * (value.real - x[0]) / (x[1] - x[0]), 1),
            round(10 + inner_h * (y[1] - value.imag) / (y[1] - y[0]), 1),
        )

    points = []
    for value, finished in zip(values, done, strict=True):
        px, py = place(complex(value))
        if finished:
            points.append(f'<circle cx="{px}" cy="{py}" r="3" fill="none" stroke="{_BLUE}"/>')
        else:
            points.append(f'<path d="M{px - 3} {py - 3}l6 6m0 -6l-6 6" stroke="{_VERMILION}"/>')
    ox, oy = place(0j)
    return _svg(
        "Eigenvalues in the complex plane",
        f'<path d="M{ox} 10v{inner_h}M{_LEFT} {oy}h{inner_w}" stroke="{_GREY}" stroke-width="0.7"/>{"".join(points)}'
        f"{_label(_LEFT, height - 6, number(x[0]), 'start')}{_label(_WIDTH - 12, height - 6, number(x[1]), 'end')}"
        f"{_label(_LEFT - 6, 20, number(y[1]), 'end')}{_label(_LEFT - 6, height - _BOTTOM, number(y[0]), 'end')}",
        height,
    )


def _finished(case: Case) -> npt.NDArray[np.bool_]:
    done = np.zeros(case.run.n, dtype=bool)
    for deflation in case.run.deflations:
        if deflation.eigenvalues:
            done[deflation.row : deflation.row + deflation.size] = True
    return done


def _axis(values: npt.NDArray[np.float64]) -> tuple[float, float]:
    """Range that holds the values and the origin, a little wider, never empty."""
    low, high = min(float(values.min()), 0.0), max(float(values.max()), 0.0)
    # Half of each end first: the difference of two numbers near the overflow limit is infinite.
    pad = 0.1 * (high / 2 - low / 2)
    if pad == 0.0:
        return -1.0, 1.0
    return low - pad, high + pad


def _label(x: float, y: float, text: str, anchor: str) -> str:
    return f'<text x="{x}" y="{y}" text-anchor="{anchor}" font-size="11" fill="#444">{escape(text)}</text>'


def _svg(title: str, body: str, height: int) -> str:
    return (
        f'<svg viewBox="0 0 {_WIDTH} {height}" role="img" aria-label="{escape(title)}" '
        f'xmlns="http://www.w3.org/2000/svg"><title>{escape(title)}</title>{body}</svg>'
    )
