"""Clouds of points as one path each: the same few strokes round every point, parted by NaN. Imports no widgets."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

__all__ = ["NOTHING", "Polyline", "crosses", "diamonds", "dots", "squares", "strokes"]

Floats = npt.NDArray[np.float64]

#: x and y of a path.
Polyline = tuple[Floats, Floats]

#: Coordinates of a path that draws nothing.
NOTHING = np.array([np.nan])

_GAP = (np.nan, np.nan)


def crosses(points: Floats, half_x: float, half_y: float) -> Polyline:
    """Upright crosses."""
    return _around(points, half_x, half_y, [(-1, 0), (1, 0), _GAP, (0, -1), (0, 1)])


def squares(points: Floats, half_x: float, half_y: float) -> Polyline:
    """Open rectangles."""
    return _around(points, half_x, half_y, [(-1, -1), (1, -1), (1, 1), (-1, 1), (-1, -1)])


def diamonds(points: Floats, half_x: float, half_y: float) -> Polyline:
    """Open diamonds."""
    return _around(points, half_x, half_y, [(-1, 0), (0, -1), (1, 0), (0, 1), (-1, 0)])


def dots(points: Floats) -> Polyline:
    """Strokes without length; the square caps of the style sheet make them squares of the stroke width."""
    return _around(points, 0.0, 0.0, [(0, 0), (0, 0)])


def strokes(places: Floats, start: float, end: float) -> Polyline:
    """Upright strokes from ``start`` to ``end`` at the given places along x."""
    middle, half = (start + end) / 2.0, (end - start) / 2.0
    return _around(np.stack([places, np.full(len(places), middle)], axis=1), 0.0, half, [(0, -1), (0, 1)])


def _around(points: Floats, half_x: float, half_y: float, shape: list[tuple[float, float]]) -> Polyline:
    if not len(points):
        return NOTHING, NOTHING
    offset = np.array([*shape, _GAP])
    return (
        (points[:, :1] + half_x * offset[:, 0]).ravel(),
        (points[:, 1:] + half_y * offset[:, 1]).ravel(),
    )
