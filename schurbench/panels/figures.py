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
import numpy.typing as npt

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

__all__ = ["DeflationFigure", "MatrixFigure", "SpectrumFigure", "SubdiagonalFigure", "TrackFigure"]

Floats = npt.NDArray[np.float64]

_EMPTY_PICTURE = picture_png(np.full((1, 1), -np.inf), (0.0, 1.0))
_NOTHING = np.array([np.nan])
_MARGIN = {"top": 8, "bottom": 34, "left": 52, "right": 14}


def _picture() -> Any:
    return ipywidgets.Image(value=_EMPTY_PICTURE, format="png")


def _axis(scale: Any, label: str, side: str = "bottom", **options: Any) -> Any:
    vertical = side == "left"
    return bqplot.Axis(
        scale=scale,
        label=label,
        side=side,
        orientation="vertical" if vertical else "horizontal",
        grid_lines="none",
        visible=False,  # until there is a range to show
        label_offset="38px" if vertical else "28px",
        **options,
    )


def _crosses(points: Floats, half_x: float, half_y: float) -> tuple[Floats, Floats]:
    """One path of upright crosses: two strokes a point, parted by NaN."""
    x, y = points[:, 0], points[:, 1]
    gap = np.full(len(points), np.nan)
    xs = np.stack([x - half_x, x + half_x, gap, x, x, gap], axis=1).ravel()
    ys = np.stack([y, y, gap, y - half_y, y + half_y, gap], axis=1).ravel()
    return (xs, ys) if len(points) else (_NOTHING, _NOTHING)


def _dots(points: Floats) -> tuple[Floats, Floats]:
    """One path of strokes without length; the square caps of the style sheet make them squares of the stroke width."""
    x, y = points[:, 0], points[:, 1]
    gap = np.full(len(points), np.nan)
    xs = np.stack([x, x, gap], axis=1).ravel()
    ys = np.stack([y, y, gap], axis=1).ravel()
    return (xs, ys) if len(points) else (_NOTHING, _NOTHING)


def _draw(mark: Any, xy: tuple[Floats, Floats]) -> None:
    """Both coordinates in one message, so that the page never pairs a new x with an old y."""
    with mark.hold_sync():
        mark.x, mark.y = xy


class _Figure:
    """A figure with its two scales, a click surface over it, and a fixed place on the page."""

    def __init__(self, marks: list[Any], x: Any, y: Any, axes: list[Any], height: str, margin: dict[str, int]) -> None:
        self.x, self.y = x, y
        self._surface = bqplot.Image(image=_picture(), scales={"x": x, "y": y}, x=[0.0, 1.0], y=[0.0, 1.0])
        self.widget = bqplot.Figure(
            marks=[*marks, self._surface],
            axes=axes,
            fig_margin=margin,
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

    def _range(self, x: tuple[float, float], y: tuple[float, float]) -> None:
        for axis in self.widget.axes:
            axis.visible = True
        for scale, (lo, hi) in ((self.x, x), (self.y, y)):
            with scale.hold_sync():
                scale.min, scale.max = float(lo), float(hi)
        with self._surface.hold_sync():
            self._surface.x, self._surface.y = list(x), list(y)


class _Swap:
    """An `Image` mark that is redrawn at every new picture. On a reversed axis its last row of pixels is on top."""

    def __init__(self, x: Any, y: Any) -> None:
        self._pair = (_picture(), _picture())
        self.mark = bqplot.Image(image=self._pair[0], scales={"x": x, "y": y}, x=[0.0, 1.0], y=[0.0, 1.0])
        self._turn = 0

    def show(self, png: bytes, x: tuple[float, float], y: tuple[float, float]) -> None:
        self._turn = 1 - self._turn
        self._pair[self._turn].value = png
        with self.mark.hold_sync():
            self.mark.x, self.mark.y = list(x), list(y)
            self.mark.image = self._pair[self._turn]


class TrackFigure(_Figure):
    """Sweeps waited, one column a step; the strip under the columns marks deflations and exceptional shifts."""

    def __init__(self, height: str) -> None:
        x, y = bqplot.LinearScale(min=0, max=1), bqplot.LinearScale(min=-1, max=1)
        scales = {"x": x, "y": y}
        self._healthy = bqplot.Lines(
            x=[0.0, 1.0],
            y=[0.0, 0.0],
            scales=scales,
            colors=[HEALTHY],
            fill="inside",
            fill_colors=[HEALTHY],
            fill_opacities=[0.16],
            stroke_width=0,
        )
        self._columns = bqplot.Lines(
            x=_NOTHING,
            y=_NOTHING,
            scales=scales,
            colors=[MUTED],
            fill="inside",
            fill_colors=[MUTED],
            fill_opacities=[0.75],
            stroke_width=0.5,
        )
        self._deflations = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=[CONVERGED], stroke_width=1.5)
        self._exceptional = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=[SHIFT], stroke_width=3)
        self._cursor = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=[CHOSEN], stroke_width=2)
        self._axis = _axis(y, "sweeps", "left")
        super().__init__(
            [self._healthy, self._columns, self._deflations, self._exceptional, self._cursor],
            x,
            y,
            [self._axis],
            height,
            {"top": 4, "bottom": 4, "left": 52, "right": 14},
        )
        self._floor = -1.0

    def show(self, view: TrackView) -> None:
        last = max(1.0, float(view.edges[-1]))
        top = 1.08 * view.top
        self._floor = -0.42 * top
        self._range((0.5, last), (self._floor, top))
        self._axis.tick_values = [float(t) for t in ticks(0, top, 4)]
        _draw(
            self._healthy,
            (
                np.array([0.5, last, last, 0.5]),
                np.array([0.0, 0.0, view.healthy, view.healthy]),
            ),
        )
        if len(view.height):
            xs = np.concatenate([view.edges[:1], np.repeat(view.edges, 2)[1:-1], view.edges[-1:]])
            ys = np.concatenate([[0.0], np.repeat(view.height, 2), [0.0]])
            _draw(self._columns, (xs, ys))
        else:
            _draw(self._columns, (_NOTHING, _NOTHING))
        self._ticks(self._deflations, view.deflations, 0.12, 0.44)
        self._ticks(self._exceptional, view.exceptional, 0.60, 0.92)

    def _ticks(self, mark: Any, steps: Floats, start: float, end: float) -> None:
        if not len(steps):
            _draw(mark, (_NOTHING, _NOTHING))
            return
        gap = np.full(len(steps), np.nan)
        xs = np.stack([steps, steps, gap], axis=1).ravel()
        ys = np.tile([start * self._floor, end * self._floor, np.nan], len(steps))
        _draw(mark, (xs, ys))

    def move(self, cursor: int) -> None:
        _draw(self._cursor, (np.array([cursor, cursor], dtype=np.float64), np.array([self._floor, self.y.max])))


class MatrixFigure(_Figure):
    """The picture of H with the active window and the chosen row."""

    def __init__(self, height: str) -> None:
        x, y = bqplot.LinearScale(min=0, max=1), bqplot.LinearScale(min=0, max=1, reverse=True)
        scales = {"x": x, "y": y}
        self._swap = _Swap(x, y)
        # dashes over a dark line, to be seen on every colour of the scale
        self._ground = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=["#222222"], stroke_width=3.5)
        self._window = bqplot.Lines(
            x=_NOTHING, y=_NOTHING, scales=scales, colors=[ACTIVE], stroke_width=2.5, line_style="dashed"
        )
        self._row = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=[CHOSEN], stroke_width=1.5)
        self._axes = [_axis(x, "column"), _axis(y, "row", "left")]
        super().__init__([self._swap.mark, self._ground, self._window, self._row], x, y, self._axes, height, _MARGIN)
        self._n = 0

    def show(self, view: MatrixView, limits: tuple[float, float], n: int) -> None:
        extent = (-0.5, n - 0.5)
        if n != self._n:
            self._n = n
            self._range(extent, extent)
            for axis in self._axes:
                axis.tick_values = [float(t) for t in ticks(0, n - 1, 5)]
        self._swap.show(picture_png(view.level[::-1], limits, 256), extent, extent)
        lo, hi = view.window[0] - 0.5, view.window[1] - 0.5
        square = (np.array([lo, hi, hi, lo, lo]), np.array([lo, lo, hi, hi, lo])) if hi > lo else (_NOTHING, _NOTHING)
        _draw(self._ground, square)
        _draw(self._window, square)

    def choose(self, row: int) -> None:
        _draw(self._row, (np.array([-0.5, self._n - 0.5]), np.array([row, row], dtype=np.float64)))


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

    def move(self, cursor: int) -> None:
        self.picture.move(cursor)
        self.curves.move(cursor)


class _SubdiagonalPicture(_Figure):
    def __init__(self, height: str) -> None:
        x, y = bqplot.LinearScale(min=0, max=1), bqplot.LinearScale(min=0, max=1, reverse=True)
        scales = {"x": x, "y": y}
        self._swap = _Swap(x, y)
        self._cursor = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=[CHOSEN], stroke_width=2)
        self._row = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=[CHOSEN], stroke_width=1.5)
        self._axes = [_axis(x, "step"), _axis(y, "row", "left")]
        super().__init__([self._swap.mark, self._cursor, self._row], x, y, self._axes, height, _MARGIN)

    def show(self, view: MapView, limits: tuple[float, float], n: int, steps: int) -> None:
        across, down = (-0.5, steps + 0.5), (0.5, max(n, 2) - 0.5)
        self._range(across, down)
        self._axes[0].tick_values = [float(t) for t in ticks(0, steps, 7)]
        self._axes[1].tick_values = [float(t) for t in ticks(1, max(n, 2) - 1, 5)]
        self._swap.show(picture_png(view.level[::-1], limits, 256), across, down)

    def move(self, cursor: int) -> None:
        _draw(self._cursor, (np.array([cursor, cursor], dtype=np.float64), np.array([self.y.min, self.y.max])))

    def choose(self, row: int) -> None:
        _draw(self._row, (np.array([self.x.min, self.x.max]), np.array([row, row], dtype=np.float64)))


class _SubdiagonalCurves(_Figure):
    def __init__(self, height: str) -> None:
        x, y = bqplot.LinearScale(min=0, max=1), bqplot.LinearScale(min=-16, max=0)
        scales = {"x": x, "y": y}
        self._others = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=[MUTED], stroke_width=1)
        self._chosen = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=[CHOSEN], stroke_width=2.5)
        self._threshold = bqplot.Lines(
            x=_NOTHING, y=_NOTHING, scales=scales, colors=[THRESHOLD], stroke_width=2, line_style="dashed"
        )
        self._cursor = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=[CHOSEN], stroke_width=2)
        self._axes = [_axis(x, "step"), _axis(y, "magnitude, log₁₀", "left")]
        super().__init__([self._others, self._threshold, self._chosen, self._cursor], x, y, self._axes, height, _MARGIN)

    def show(self, view: CurvesView, limits: tuple[float, float], steps: int) -> None:
        lo, hi = float(np.floor(limits[0] - 3.0)), float(np.ceil(limits[1]))
        self._range((-0.5, steps + 0.5), (lo, hi))
        self._axes[0].tick_values = [float(t) for t in ticks(0, steps, 7)]
        self._axes[1].tick_values = [float(t) for t in ticks(lo, hi, 6)]
        level = np.clip(view.level, lo, hi)
        gap = np.full((len(view.rows), 1), np.nan)
        xs = np.concatenate([np.broadcast_to(view.steps, level.shape), gap], axis=1)
        ys = np.concatenate([level, gap], axis=1)
        _draw(self._chosen, (xs[0], ys[0]) if len(xs) else (_NOTHING, _NOTHING))
        _draw(self._others, (xs[1:].ravel(), ys[1:].ravel()) if len(xs) > 1 else (_NOTHING, _NOTHING))
        _draw(self._threshold, (view.steps, np.clip(view.threshold, lo, hi)))

    def move(self, cursor: int) -> None:
        _draw(self._cursor, (np.array([cursor, cursor], dtype=np.float64), np.array([self.y.min, self.y.max])))


class DeflationFigure(_Figure):
    """Every deflation by step and row, over the outline of the active window."""

    def __init__(self, height: str) -> None:
        x, y = bqplot.LinearScale(min=0, max=1), bqplot.LinearScale(min=0, max=1, reverse=True)
        scales = {"x": x, "y": y}
        self._outline = bqplot.Lines(
            x=_NOTHING,
            y=_NOTHING,
            scales=scales,
            colors=[ACTIVE],
            fill="inside",
            fill_colors=[ACTIVE],
            fill_opacities=[0.22],
            stroke_width=0.5,
        )
        self._single = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=[CONVERGED], stroke_width=5)
        self._pair = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=[CONVERGED], stroke_width=1.5)
        self._split = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=[SHIFT], stroke_width=2)
        self._cursor = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=[CHOSEN], stroke_width=2)
        self._row = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=[CHOSEN], stroke_width=1.5)
        self._axes = [_axis(x, "step"), _axis(y, "row", "left")]
        marks = [self._outline, self._split, self._pair, self._single, self._cursor, self._row]
        super().__init__(marks, x, y, self._axes, height, _MARGIN)
        self.widget.add_class("sb-dots")

    def show(self, view: DeflationView, n: int, steps: int) -> None:
        across, down = (-0.5, steps + 0.5), (-0.5, n - 0.5)
        self._range(across, down)
        self._axes[0].tick_values = [float(t) for t in ticks(0, steps, 7)]
        self._axes[1].tick_values = [float(t) for t in ticks(0, n - 1, 5)]
        # along the first rows and back along the last ones, each held until the next state
        if len(view.outline):
            at = np.append(view.outline[:, 0], min(view.outline[-1, 0] + 1.0, steps))
            xs = np.repeat(at, 2)[1:-1]
            first, last = np.repeat(view.outline[:, 1], 2), np.repeat(view.outline[:, 2], 2)
            _draw(self._outline, (np.concatenate([xs, xs[::-1]]), np.concatenate([first - 0.5, last[::-1] + 0.5])))
        else:
            _draw(self._outline, (_NOTHING, _NOTHING))
        wide, tall = 0.006 * (steps + 1), 0.03 * n
        _draw(self._single, _dots(view.single))
        _draw(self._pair, _squares(view.pair, wide, tall))
        _draw(self._split, _crosses(view.split, wide, tall))

    def move(self, cursor: int) -> None:
        _draw(self._cursor, (np.array([cursor, cursor], dtype=np.float64), np.array([self.y.min, self.y.max])))

    def choose(self, row: int) -> None:
        _draw(self._row, (np.array([self.x.min, self.x.max]), np.array([row, row], dtype=np.float64)))


def _squares(points: Floats, half_x: float, half_y: float) -> tuple[Floats, Floats]:
    """One path of open rectangles."""
    x, y = points[:, 0], points[:, 1]
    gap = np.full(len(points), np.nan)
    xs = np.stack([x - half_x, x + half_x, x + half_x, x - half_x, x - half_x, gap], axis=1).ravel()
    ys = np.stack([y - half_y, y - half_y, y + half_y, y + half_y, y - half_y, gap], axis=1).ravel()
    return (xs, ys) if len(points) else (_NOTHING, _NOTHING)


class SpectrumFigure(_Figure):
    """Ritz values in the complex plane; moving ones are crosses, converged ones squares, shifts open diamonds."""

    def __init__(self, height: str) -> None:
        x, y = bqplot.LinearScale(min=-1, max=1), bqplot.LinearScale(min=-1, max=1)
        scales = {"x": x, "y": y}
        self._boundary = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=[MUTED], stroke_width=1)
        self._active = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=[ACTIVE], stroke_width=1.5)
        self._converged = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=[CONVERGED], stroke_width=5)
        self._shifts = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=[SHIFT], stroke_width=2)
        self._chosen = bqplot.Lines(x=_NOTHING, y=_NOTHING, scales=scales, colors=[CHOSEN], stroke_width=2)
        self._axes = [_axis(x, "real part"), _axis(y, "imaginary part", "left")]
        marks = [self._boundary, self._converged, self._active, self._shifts, self._chosen]
        super().__init__(marks, x, y, self._axes, height, _MARGIN)
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
        _draw(self._active, _crosses(view.active, dx, dy))
        _draw(self._converged, _dots(view.converged))
        _draw(self._shifts, _diamonds(view.shifts, 1.6 * dx, 1.6 * dy))
        _draw(self._chosen, _squares(view.chosen, 2.0 * dx, 2.0 * dy))


def _diamonds(points: Floats, half_x: float, half_y: float) -> tuple[Floats, Floats]:
    """One path of open diamonds."""
    x, y = points[:, 0], points[:, 1]
    gap = np.full(len(points), np.nan)
    xs = np.stack([x - half_x, x, x + half_x, x, x - half_x, gap], axis=1).ravel()
    ys = np.stack([y, y - half_y, y, y + half_y, y, gap], axis=1).ravel()
    return (xs, ys) if len(points) else (_NOTHING, _NOTHING)


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
