"""The bqplot figures: each is built once and then updated in place with what a view function returned.

Rebuilding figures leaks widgets, so nothing here is ever recreated. Pictures are `Image` marks whose two image widgets
take turns, because a changed ``image.value`` is not redrawn; clouds of points are drawn as one `Lines` path each,
because a `Scatter` of 2000 points takes a quarter of a second.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import bqplot
import ipywidgets
import numpy as np

from schurbench.panels.colours import (
    ACTIVE,
    BELOW,
    CHOSEN,
    CONVERGED,
    HEALTHY,
    MUTED,
    SHIFT,
    THRESHOLD,
    gradient,
    picture_png,
)
from schurbench.panels.glyphs import NOTHING, Polyline, crosses, diamonds, dots, squares, strokes
from schurbench.panels.text import power
from schurbench.panels.views import (
    CurvesView,
    DeflationView,
    MapView,
    MatrixView,
    SpectrumView,
    TrackView,
    ticks,
)
from schurbench.prepare.plain import number

__all__ = ["DeflationFigure", "MatrixFigure", "SpectrumFigure", "SubdiagonalFigure", "TrackFigure", "scale_html"]

_EMPTY_PICTURE = picture_png(np.full((1, 1), -np.inf), (0.0, 1.0))
_GROUND = "#222222"
_MARGIN = {"top": 8, "bottom": 34, "left": 52, "right": 14}


def _picture() -> Any:
    return ipywidgets.Image(value=_EMPTY_PICTURE, format="png")


def _draw(mark: Any, path: Polyline) -> None:
    """Both coordinates in one message, so that the page never pairs a new x with an old y."""
    with mark.hold_sync():
        mark.x, mark.y = path


class _Figure:
    """A figure with its scales and axes, the lines of the cursor and the chosen row, and a click surface over it."""

    def __init__(
        self, height: str, across: str, down: str, *, reverse: bool = False, margin: dict[str, int] | None = None
    ) -> None:
        self.x, self.y = bqplot.LinearScale(min=0, max=1), bqplot.LinearScale(min=0, max=1, reverse=reverse)
        self._scales = {"x": self.x, "y": self.y}
        self._axes = [
            bqplot.Axis(
                scale=scale,
                label=label,
                side=side,
                orientation="horizontal" if side == "bottom" else "vertical",
                grid_lines="none",
                visible=False,  # until there is a range to show
                label_offset="28px" if side == "bottom" else "38px",
            )
            for scale, label, side in ((self.x, across, "bottom"), (self.y, down, "left"))
            if label
        ]
        self._cursor = self._lines(CHOSEN, 2)
        self._row = self._lines(CHOSEN, 1.5)
        self._surface = bqplot.Image(image=_picture(), scales=self._scales, x=[0.0, 1.0], y=[0.0, 1.0])
        self.widget = bqplot.Figure(
            axes=self._axes,
            fig_margin=margin or _MARGIN,
            padding_x=0.0,
            padding_y=0.0,
            animation_duration=0,
            legend_location="top-right",
            layout=ipywidgets.Layout(width="auto", height=height, min_width="0"),
        )

    def on_click(self, handler: Callable[[float, float], None]) -> None:
        """Call ``handler(x, y)`` with the place of a click, in the units of the axes."""

        def clicked(_mark: Any, event: dict[str, Any]) -> None:
            data = event.get("data") or {}
            if "click_x" in data and "click_y" in data:
                handler(float(data["click_x"]), float(data["click_y"]))

        self._surface.on_element_click(clicked)

    def move(self, cursor: int) -> None:
        """Put the line of the cursor at a step."""
        _draw(self._cursor, (np.full(2, float(cursor)), np.array([self.y.min, self.y.max])))

    def choose(self, row: int) -> None:
        """Put the line of the chosen row."""
        _draw(self._row, (np.array([self.x.min, self.x.max]), np.full(2, float(row))))

    def _lines(self, colour: str, width: float, *, style: str = "solid", fill: float = 0.0) -> Any:
        """A path that draws nothing yet; ``fill`` is the opacity of what it encloses."""
        enclosed = {"fill": "inside", "fill_colors": [colour], "fill_opacities": [fill]} if fill else {}
        return bqplot.Lines(
            x=NOTHING, y=NOTHING, scales=self._scales, colors=[colour], stroke_width=width, line_style=style, **enclosed
        )

    def _stack(self, *marks: Any) -> None:
        """Lay the marks over each other, the first at the bottom and the click surface on top."""
        self.widget.marks = [*marks, self._surface]

    def _range(self, x: tuple[float, float], y: tuple[float, float]) -> None:
        for axis in self.widget.axes:
            axis.visible = True
        for scale, (lo, hi) in ((self.x, x), (self.y, y)):
            with scale.hold_sync():
                scale.min, scale.max = float(lo), float(hi)
        with self._surface.hold_sync():
            self._surface.x, self._surface.y = list(x), list(y)

    def _whole_ticks(self, across: tuple[float, float], down: tuple[float, float], most: tuple[int, int]) -> None:
        """Whole numbers along both axes, which are all rows, columns, steps or decades."""
        for axis, (lo, hi), count in zip(self._axes, (across, down), most, strict=True):
            axis.tick_values = [float(t) for t in ticks(lo, hi, count)]


class _Swap:
    """An `Image` mark that is redrawn at every new picture. On a reversed axis its last row of pixels is on top."""

    def __init__(self, scales: dict[str, Any]) -> None:
        self._pair = (_picture(), _picture())
        self.mark = bqplot.Image(image=self._pair[0], scales=scales, x=[0.0, 1.0], y=[0.0, 1.0])
        self._turn = 0

    def show(self, png: bytes, x: tuple[float, float], y: tuple[float, float]) -> None:
        self._turn = 1 - self._turn
        self._pair[self._turn].value = png
        with self.mark.hold_sync():
            self.mark.x, self.mark.y = list(x), list(y)
            self.mark.image = self._pair[self._turn]


class TrackFigure(_Figure):
    """Sweeps waited, one column a step; the strip below marks deflations, deflation windows and exceptional shifts."""

    def __init__(self, height: str) -> None:
        super().__init__(height, "", "sweeps", margin={"top": 4, "bottom": 4, "left": 52, "right": 14})
        self._healthy = self._lines(HEALTHY, 0, fill=0.16)
        self._columns = self._lines(MUTED, 0.5, fill=0.75)
        self._deflations = self._lines(CONVERGED, 1.5)
        self._windows = self._lines(ACTIVE, 1.5)
        self._exceptional = self._lines(SHIFT, 3)
        self._stack(self._healthy, self._columns, self._deflations, self._windows, self._exceptional, self._cursor)

    def show(self, view: TrackView) -> None:
        last = max(1.0, float(view.edges[-1]))
        top = 1.08 * view.top
        floor = -0.42 * top
        self._range((0.5, last), (floor, top))
        self._axes[0].tick_values = [float(t) for t in ticks(0, top, 4)]
        _draw(self._healthy, (np.array([0.5, last, last, 0.5]), np.repeat([0.0, view.healthy], 2)))
        _draw(self._columns, _columns(view))
        _draw(self._deflations, strokes(view.deflations, 0.12 * floor, 0.44 * floor))
        _draw(self._windows, strokes(view.windows, 0.60 * floor, 0.76 * floor))
        _draw(self._exceptional, strokes(view.exceptional, 0.60 * floor, 0.92 * floor))


def _columns(view: TrackView) -> Polyline:
    """The outline of all columns side by side, from the ground up and back."""
    if not len(view.height):
        return NOTHING, NOTHING
    xs = np.concatenate([view.edges[:1], np.repeat(view.edges, 2)[1:-1], view.edges[-1:]])
    return xs, np.concatenate([[0.0], np.repeat(view.height, 2), [0.0]])


class MatrixFigure(_Figure):
    """The picture of H with the active window, the deflation window of the step and the chosen row."""

    def __init__(self, height: str) -> None:
        super().__init__(height, "column", "row", reverse=True)
        self._swap = _Swap(self._scales)
        # dashes and dots over a dark line, to be seen on every colour of the scale
        self._window = (self._lines(_GROUND, 3.5), self._lines(ACTIVE, 2.5, style="dashed"))
        self._looked = (self._lines(_GROUND, 3.5), self._lines(SHIFT, 2.5, style="dotted"))
        self._stack(self._swap.mark, *self._window, *self._looked, self._row)
        self._n = 0

    def show(self, view: MatrixView, limits: tuple[float, float], n: int) -> None:
        extent = (-0.5, n - 0.5)
        if n != self._n:
            self._n = n
            self._range(extent, extent)
            self._whole_ticks((0, n - 1), (0, n - 1), (5, 5))
        self._swap.show(picture_png(view.level[::-1], limits, 256), extent, extent)
        for marks, window in ((self._window, view.window), (self._looked, view.looked_into)):
            for mark in marks:
                _draw(mark, _outline(window))


def _outline(window: tuple[int, int]) -> Polyline:
    """The square that a half-open window is in H."""
    lo, hi = window
    if hi <= lo:
        return NOTHING, NOTHING
    return squares(np.full((1, 2), (lo + hi - 1) / 2.0), (hi - lo) / 2.0, (hi - lo) / 2.0)


class SubdiagonalFigure:
    """Subdiagonal magnitudes, as a picture of position over step or as curves of a few entries."""

    def __init__(self, height: str) -> None:
        self.picture = _SubdiagonalPicture(height)
        self.curves = _SubdiagonalCurves(height)
        self.widget = ipywidgets.Box([self.picture.widget], layout=ipywidgets.Layout(width="auto", min_width="0"))
        self.widget.layout.display = "block"

    def show_curves(self, curves: bool) -> None:
        """Swap the picture for the curves, or back; both keep their state."""
        self.widget.children = [self.curves.widget if curves else self.picture.widget]


class _SubdiagonalPicture(_Figure):
    def __init__(self, height: str) -> None:
        super().__init__(height, "step", "row", reverse=True)
        self._swap = _Swap(self._scales)
        self._stack(self._swap.mark, self._cursor, self._row)

    def show(self, view: MapView, limits: tuple[float, float], n: int, steps: int) -> None:
        across, down = (-0.5, steps + 0.5), (0.5, max(n, 2) - 0.5)
        self._range(across, down)
        self._whole_ticks((0, steps), (1, max(n, 2) - 1), (7, 5))
        self._swap.show(picture_png(view.level[::-1], limits, 256), across, down)


class _SubdiagonalCurves(_Figure):
    def __init__(self, height: str) -> None:
        super().__init__(height, "step", "magnitude, log₁₀")
        self._others = self._lines(MUTED, 1)
        self._chosen = self._lines(CHOSEN, 2.5)
        self._threshold = self._lines(THRESHOLD, 2, style="dashed")
        self._stack(self._others, self._threshold, self._chosen, self._cursor)

    def show(self, view: CurvesView, limits: tuple[float, float], steps: int) -> None:
        lo, hi = float(np.floor(limits[0] - 3.0)), float(np.ceil(limits[1]))
        self._range((-0.5, steps + 0.5), (lo, hi))
        self._whole_ticks((0, steps), (lo, hi), (7, 6))
        level = np.clip(view.level, lo, hi)
        gap = np.full((len(view.rows), 1), np.nan)
        xs = np.concatenate([np.broadcast_to(view.steps, level.shape), gap], axis=1)
        ys = np.concatenate([level, gap], axis=1)
        _draw(self._chosen, (xs[0], ys[0]) if len(xs) else (NOTHING, NOTHING))
        _draw(self._others, (xs[1:].ravel(), ys[1:].ravel()) if len(xs) > 1 else (NOTHING, NOTHING))
        _draw(self._threshold, (view.steps, np.clip(view.threshold, lo, hi)))


class DeflationFigure(_Figure):
    """Every deflation by step and row, over the outline of the active window."""

    def __init__(self, height: str) -> None:
        super().__init__(height, "step", "row", reverse=True)
        self._outline = self._lines(ACTIVE, 0.5, fill=0.22)
        self._single = self._lines(CONVERGED, 5)
        self._pair = self._lines(CONVERGED, 1.5)
        self._split = self._lines(SHIFT, 2)
        self._stack(self._outline, self._split, self._pair, self._single, self._cursor, self._row)
        self.widget.add_class("sb-dots")

    def show(self, view: DeflationView, n: int, steps: int) -> None:
        self._range((-0.5, steps + 0.5), (-0.5, n - 0.5))
        self._whole_ticks((0, steps), (0, n - 1), (7, 5))
        # along the first rows and back along the last ones, each held until the next state
        if len(view.outline):
            at = np.append(view.outline[:, 0], min(view.outline[-1, 0] + 1.0, steps))
            xs = np.repeat(at, 2)[1:-1]
            first, last = np.repeat(view.outline[:, 1], 2), np.repeat(view.outline[:, 2], 2)
            _draw(self._outline, (np.concatenate([xs, xs[::-1]]), np.concatenate([first - 0.5, last[::-1] + 0.5])))
        else:
            _draw(self._outline, (NOTHING, NOTHING))
        wide, tall = 0.006 * (steps + 1), 0.03 * n
        _draw(self._single, dots(view.single))
        _draw(self._pair, squares(view.pair, wide, tall))
        _draw(self._split, crosses(view.split, wide, tall))


class SpectrumFigure(_Figure):
    """Ritz values in the complex plane; moving ones are crosses, converged ones squares, shifts open diamonds."""

    def __init__(self, height: str) -> None:
        super().__init__(height, "real part", "imaginary part")
        self._boundary = self._lines(MUTED, 1)
        self._active = self._lines(ACTIVE, 1.5)
        self._converged = self._lines(CONVERGED, 5)
        self._shifts = self._lines(SHIFT, 2)
        self._chosen = self._lines(CHOSEN, 2)
        self._stack(self._boundary, self._converged, self._active, self._shifts, self._chosen)
        self.widget.add_class("sb-dots")

    def frame(self, x: tuple[float, float], y: tuple[float, float]) -> None:
        """Set the ranges for a run; they stay while the cursor moves."""
        self._range(x, y)
        for axis, (lo, hi) in zip(self._axes, (x, y), strict=True):
            axis.tick_values = _round_ticks(lo, hi, 5)
            axis.tick_format = "~g"
        _draw(self._boundary, (np.array([0.0, 0.0, np.nan, x[0], x[1]]), np.array([y[0], y[1], np.nan, 0.0, 0.0])))

    def show(self, view: SpectrumView) -> None:
        dx, dy = 0.012 * (self.x.max - self.x.min), 0.022 * (self.y.max - self.y.min)
        _draw(self._active, crosses(view.active, dx, dy))
        _draw(self._converged, dots(view.converged))
        _draw(self._shifts, diamonds(view.shifts, 1.6 * dx, 1.6 * dy))
        _draw(self._chosen, squares(view.chosen, 2.0 * dx, 2.0 * dy))


def _round_ticks(lo: float, hi: float, most: int) -> list[float]:
    """Round values in [lo, hi] at any order of magnitude."""
    unit = 10.0 ** np.floor(np.log10((hi - lo) / most))
    for factor in (1.0, 2.0, 5.0, 10.0):
        if (hi - lo) / (factor * unit) <= most:
            break
    step = factor * unit
    return [float(i * step) for i in range(int(np.ceil(lo / step)), int(np.floor(hi / step)) + 1)]


def scale_html(limits: tuple[float, float]) -> str:
    """The magnitude scale that both pictures share, with decades marked and the rounding level as its foot."""
    lo, hi = limits
    marks = "".join(
        f'<span style="bottom:{100.0 * (decade - lo) / (hi - lo):.1f}%">{power(decade)}</span>'
        for decade in ticks(lo + 0.06 * (hi - lo), hi, 6)
    )
    return (
        '<div class="sb-scale" role="img" aria-label="Colour scale of magnitudes">'
        f'<div class="sb-bar" style="background:{gradient()}">{marks}'
        f'<span class="sb-level" style="border-color:{THRESHOLD}"></span></div>'
        f'<div class="sb-key">{number(10.0**lo)}</div>'
        f'<div class="sb-key"><i style="background:rgb{BELOW}"></i>below</div>'
        '<div class="sb-key"><i></i>zero</div></div>'
    )
