"""A region's weights on the grid of one slice, and how much of it the grid does not hold."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal, TypeAlias

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Iterable

    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["Coverage", "Grid", "Rule", "share_outside", "share_outside_by_centers"]

Rule: TypeAlias = Literal["area", "center"]


@dataclass(frozen=True, slots=True, eq=False)
class Coverage:
    """A region on one slice's grid.

    Attributes
    ----------
    weights : ndarray, shape (h, w)
        Fraction of each pixel inside the region, 0 to 1, cropped to the region.
    rows, columns : slice
        Where the crop lies in the image; always within it.
    outside : float
        Fraction of the region's area that lies outside the image, 0 to 1.
    """

    weights: Floats
    rows: slice
    columns: slice
    outside: float


@dataclass(frozen=True, slots=True)
class Grid:
    """Rows and columns of a slice, their steps and the centre of the first pixel, in mm."""

    shape: tuple[int, int]
    spacing_mm: tuple[float, float]
    origin_mm: tuple[float, float]

    def index(self, points_mm: Floats) -> Floats:
        """Turn (…, 2) millimetres into row and column."""
        moved: Floats = (points_mm - np.asarray(self.origin_mm)) / np.asarray(self.spacing_mm)
        return moved

    @property
    def pixel_area(self) -> float:
        """Area of a pixel, mm²."""
        return self.spacing_mm[0] * self.spacing_mm[1]

    def crop(self, low: Iterable[float], high: Iterable[float]) -> tuple[slice, slice]:
        """Return the rows and columns of pixels that touch an index-space box, within the image."""
        spans = []
        for lo, hi, n in zip(low, high, self.shape, strict=True):
            start = min(max(math.floor(lo + 0.5), 0), n)
            stop = min(max(math.ceil(hi + 0.5), start), n)
            spans.append(slice(start, stop))
        return spans[0], spans[1]


def share_outside(weights: Floats, area_mm2: float, grid: Grid) -> float:
    """Return which share of a region's area the weights do not hold, 0 within rounding."""
    share = 1.0 - float(weights.sum()) * grid.pixel_area / area_mm2
    return 0.0 if share < 1e-9 else min(share, 1.0)


def share_outside_by_centers(area_mm2: float, grid: Grid, weights: Floats) -> float:
    """Judge the outside share by whole pixels only when it is beyond their rounding."""
    share = 1.0 - float(weights.sum()) * grid.pixel_area / area_mm2
    perimeter = 2 * math.sqrt(math.pi * area_mm2)
    rounding = perimeter * math.sqrt(grid.pixel_area) / area_mm2
    return 0.0 if share < rounding else min(share, 1.0)
