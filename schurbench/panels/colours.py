"""Colours of the panels, and pictures as PNG bytes.

Magnitudes use viridis (S. van der Walt and N. Smith, 2015, public domain), categories the colour-blind-safe set of
M. Okabe and K. Ito, *Color Universal Design*, 2008. Every category also has its own shape or line style, so that
nothing is told by colour alone.
"""

from __future__ import annotations

import struct
import zlib

import numpy as np
import numpy.typing as npt

__all__ = [
    "ACTIVE",
    "BELOW",
    "CHOSEN",
    "CONVERGED",
    "HEALTHY",
    "MUTED",
    "SHIFT",
    "THRESHOLD",
    "gradient",
    "picture_png",
]

# Okabe and Ito 2008.
CHOSEN = "#D55E00"  #: vermillion: the step, row or value you chose, the same everywhere
ACTIVE = "#56B4E9"  #: sky blue: the active window and what is in it
CONVERGED = "#009E73"  #: bluish green: converged, deflated
SHIFT = "#E69F00"  #: orange: shifts
THRESHOLD = "#CC79A7"  #: reddish purple: the deflation threshold
HEALTHY = CONVERGED
MUTED = "#888888"

#: Entries that are not zero but lie below the rounding level of H.
BELOW = (150, 150, 150)

# Ten evenly spaced colours of viridis; between them linear interpolation stays within a few units of 255.
_ANCHORS = ("440154", "482878", "3e4989", "31688e", "26828e", "1f9e89", "35b779", "6ece58", "b5de2b", "fde725")


def _palette() -> npt.NDArray[np.uint8]:
    anchors = np.array([[int(c[i : i + 2], 16) for i in (0, 2, 4)] for c in _ANCHORS], dtype=float)
    at = np.linspace(0.0, len(anchors) - 1.0, 256)
    table = np.stack([np.interp(at, np.arange(len(anchors)), anchors[:, channel]) for channel in range(3)], axis=1)
    return np.rint(table).astype(np.uint8)


_VIRIDIS = _palette()


def gradient() -> str:
    """The magnitude scale as a CSS gradient, smallest at the bottom."""
    return "linear-gradient(to top, " + ", ".join(f"#{c}" for c in _ANCHORS) + ")"


def picture_png(level: npt.NDArray[np.float64], limits: tuple[float, float], smallest_side: int = 1) -> bytes:
    """A magnitude picture as PNG bytes.

    Parameters
    ----------
    level : (p, q) ndarray of float64
        log10 of the magnitudes; -inf where every entry is exactly zero.
    limits : (float, float)
        Levels shown as the first and the last colour. Finite levels under the first are grey.
    smallest_side : int
        Pixels are repeated until both sides have at least this many, so that a browser need not blur small pictures.

    Returns
    -------
    bytes
        A PNG file with transparency: exact zeros are transparent and take the colour of the page.
    """
    lo, hi = limits
    zero = np.isneginf(level)
    share = np.where(zero, 0.0, (level - lo) / max(hi - lo, 1e-12))
    pixels = np.empty((*level.shape, 4), dtype=np.uint8)
    pixels[..., :3] = _VIRIDIS[np.clip(np.rint(share * 255.0), 0, 255).astype(np.intp)]
    pixels[..., 3] = 255
    pixels[(share < 0.0) & ~zero, :3] = BELOW
    pixels[zero] = 0
    for axis in (0, 1):
        repeat = -(-smallest_side // max(1, level.shape[axis]))
        if repeat > 1:
            pixels = np.repeat(pixels, repeat, axis=axis)
    return _png(pixels)


def _png(pixels: npt.NDArray[np.uint8]) -> bytes:
    """Write 8-bit RGBA (W3C PNG specification, third edition, sections 5 and 11: IHDR, IDAT, IEND; filter 0)."""
    height, width = pixels.shape[:2]
    rows = np.zeros((height, 1 + 4 * width), dtype=np.uint8)
    rows[:, 1:] = pixels.reshape(height, 4 * width)

    def chunk(name: bytes, data: bytes) -> bytes:
        return struct.pack(">I", len(data)) + name + data + struct.pack(">I", zlib.crc32(name + data))

    header = struct.pack(">IIBBBBB", width, height, 8, 6, 0, 0, 0)
    return (
        b"\x89PNG\r\n\x1a\n"
        + chunk(b"IHDR", header)
        + chunk(b"IDAT", zlib.compress(rows.tobytes(), 1))
        + chunk(b"IEND", b"")
    )
