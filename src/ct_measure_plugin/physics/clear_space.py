"""Room on a slice that no other object's edge enters, and boxes that fit into it."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.straight_pieces import Straight

    Floats = NDArray[np.float64]
    Flags = NDArray[np.bool_]

__all__ = ["PixelBox", "Space", "box_about", "box_along", "pixel_box"]

#: Other edges stay so many FWHM and one pixel away from a box: there they have died out.
MARGIN_FWHM = 1.5

#: Even material on either side of an edge, FWHM: what is wanted, and the least that is proposed.
WANTED_FWHM, LEAST_FWHM = 6.0, 2.5

#: Lengths tried, as shares of the straight piece.
LENGTHS = (1.0, 0.9, 0.8, 0.7, 0.6, 0.5, 0.4, 0.3)


@dataclass(frozen=True, slots=True)
class PixelBox:
    """Pixels of an upright box: first and last row and column, all included."""

    top: int
    bottom: int
    left: int
    right: int

    @property
    def shape(self) -> tuple[int, int]:
        """Numbers of rows and columns."""
        return self.bottom - self.top + 1, self.right - self.left + 1

    def of(self, image: Floats) -> Floats:
        """Return the pixels."""
        return image[self.top : self.bottom + 1, self.left : self.right + 1]


def pixel_box(
    shape: tuple[int, ...],
    spacing_mm: tuple[float, float],
    center_mm: tuple[float, float],
    half_mm: tuple[float, float],
) -> PixelBox | None:
    """Return the pixels whose centres lie in a box, or None if it leaves the image."""
    sides = []
    for middle, half, step, count in zip(center_mm, half_mm, spacing_mm, shape, strict=True):
        first = math.ceil((middle - half) / step - 1e-6)
        last = math.floor((middle + half) / step + 1e-6)
        if first < 0 or last >= count:
            return None
        sides += [first, last]
    return PixelBox(*sides)


class Space:
    """Which boxes of a slice are free of marks.

    Parameters
    ----------
    shape : (int, int)
        Of the slice.
    spacing_mm : (float, float)
        dy, dx.
    y, x : ndarray, shape (n,)
        Places that no box may hold, mm.
    step : ndarray, shape (n,)
        How strong the edges there are: by how much the values rise.
    """

    def __init__(
        self,
        shape: tuple[int, int],
        spacing_mm: tuple[float, float],
        y: Floats,
        x: Floats,
        step: Floats,
    ) -> None:
        self.shape = shape
        self.spacing_mm = spacing_mm
        self.y, self.x, self.step = y, x, step

    def box(self, center_mm: tuple[float, float], half_mm: tuple[float, float]) -> PixelBox | None:
        """Return the pixels of a box on this slice, see :func:`pixel_box`."""
        return pixel_box(self.shape, self.spacing_mm, center_mm, half_mm)

    def is_clear(self, box: PixelBox, margin_mm: float = 0.0) -> bool:
        """Tell whether a box and a margin around it hold no mark."""
        dy, dx = self.spacing_mm
        inside = (self.y >= box.top * dy - margin_mm) & (self.y <= box.bottom * dy + margin_mm)
        inside &= (self.x >= box.left * dx - margin_mm) & (self.x <= box.right * dx + margin_mm)
        return not bool(inside.any())

    def without(self, left_out: Flags) -> Space:
        """Return the space without some of its marks."""
        kept = ~left_out
        places = self.y[kept], self.x[kept], self.step[kept]
        return Space(self.shape, self.spacing_mm, *places)

    def strong(self, least: float) -> Space:
        """Return the space with the marks of strong edges only."""
        return self.without(self.step < least)


def box_along(
    space: Space, piece: Straight, fwhm: float, *, least_px: int
) -> tuple[PixelBox, float] | None:
    """Return the best box on a straight edge and the length of edge in it, or None.

    Best is the most edge, with even material of six FWHM on either side or a little less.
    """
    pixel = max(space.spacing_mm)
    widest = max(WANTED_FWHM * fwhm, 0.5 * least_px * pixel) + pixel
    widths = np.linspace(widest, LEAST_FWHM * fwhm, 10)
    margin = MARGIN_FWHM * fwhm + pixel
    along = np.array([math.cos(piece.normal), -math.sin(piece.normal)])
    best: tuple[float, PixelBox, float] | None = None
    for share in LENGTHS:
        length = share * piece.length
        if best is not None and length <= best[0]:
            break  # nothing shorter can win
        for shift in np.linspace(-0.5, 0.5, 5) * (piece.length - length) if share < 1 else [0.0]:
            place = np.asarray(piece.middle) + shift * along
            for width in widths:
                half = _half(piece.normal, length, float(width))
                box = space.box((float(place[0]), float(place[1])), half)
                if box is None or min(box.shape) < least_px or not space.is_clear(box, margin):
                    continue
                reach = _reach(piece.normal, half)
                if reach < LEAST_FWHM * fwhm:
                    continue
                score = length * math.sqrt(min(1.0, reach / (WANTED_FWHM * fwhm)))
                if best is None or score > best[0]:
                    best = score, box, length
                break
    return None if best is None else best[1:]


def _half(normal: float, length: float, width: float) -> tuple[float, float]:
    """Return half height and half width of the upright box that an edge crosses from end to end.

    The edge leaves through the sides that it is nearest to being at right angles to.
    """
    up, beside = abs(math.cos(normal)) * length / 2, abs(math.sin(normal)) * length / 2
    # so wide that the line at this distance still has 0.6 of its length in the box
    if up >= beside:
        return up, max(beside, width / abs(math.cos(normal)) + 0.2 * beside)
    return max(up, width / abs(math.sin(normal)) + 0.2 * up), beside


def _chord(normal: float, half: tuple[float, float], d: Floats) -> Floats:
    """Return the lengths of the lines at distances d from a box's middle that lie in the box."""
    low, high = np.full_like(d, -math.inf), np.full_like(d, math.inf)
    sides = ((math.sin(normal), math.cos(normal)), (math.cos(normal), -math.sin(normal)))
    for (across, along), size in zip(sides, half, strict=True):
        if abs(along) < 1e-9:
            low = np.where(np.abs(d * across) > size, math.inf, low)
            continue
        first, last = (-size - d * across) / along, (size - d * across) / along
        low = np.maximum(low, np.minimum(first, last))
        high = np.minimum(high, np.maximum(first, last))
    found: Floats = np.maximum(0.0, high - low)
    return found


def _reach(normal: float, half: tuple[float, float]) -> float:
    """Return up to which distance from the edge a box holds at least 0.6 of the edge's length."""
    d = np.linspace(0.0, math.hypot(*half), 60)
    chord = np.minimum(_chord(normal, half, d), _chord(normal, half, -d))
    return float(d[chord >= 0.6 * chord[0]][-1])


def box_about(
    space: Space,
    center_mm: tuple[float, float],
    *,
    wanted_mm: float,
    least_mm: float,
    margin_mm: float,
) -> float | None:
    """Return half the side of the largest clear square about a place, between two sizes."""
    for half in np.linspace(wanted_mm, least_mm, 16):
        box = space.box(center_mm, (float(half), float(half)))
        if box is not None and space.is_clear(box, margin_mm):
            return float(half)
    return None
