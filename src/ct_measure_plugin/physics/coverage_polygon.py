"""The exact coverage of pixels by a polygon, and its pixels by their centres."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.coverage_grid import (
    Coverage,
    Grid,
    Rule,
    share_outside,
    share_outside_by_centers,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["polygon_coverage"]


def polygon_coverage(vertices_mm: Floats, area_mm2: float, grid: Grid, rule: Rule) -> Coverage:
    """Return the coverage of a simple polygon of known area, corners (n, 2) as (y, x).

    >>> corners = np.array([[0.0, 0.0], [0.0, 2.0], [1.0, 2.0], [1.0, 0.0]])
    >>> polygon_coverage(corners, 2.0, Grid((4, 4), (1.0, 1.0), (0.0, 0.0)), "area").weights
    array([[0.25, 0.5 , 0.25],
           [0.25, 0.5 , 0.25]])
    """
    points = grid.index(vertices_mm) + 0.5  # pixel k now spans [k, k + 1]
    rows, columns = grid.crop(points.min(axis=0) - 0.5, points.max(axis=0) - 0.5)
    shape = rows.stop - rows.start, columns.stop - columns.start
    local = points - (rows.start, columns.start)
    if 0 in shape:
        return Coverage(np.zeros(shape), rows, columns, 1.0)
    if rule == "center":
        weights = _centers_in_polygon(local, shape).astype(float)
        return Coverage(weights, rows, columns, share_outside_by_centers(area_mm2, grid, weights))
    weights = _polygon_area(local, shape)
    return Coverage(weights, rows, columns, share_outside(weights, area_mm2, grid))


def _polygon_area(points: Floats, shape: tuple[int, int]) -> Floats:
    """Return the exact share of each unit cell inside a polygon of (row, column) corners.

    Every edge is cut where it meets a grid line; each piece then lies in one cell and covers
    ``dy`` of its height: that area in its own cell up to the cell's right side, and the whole of
    ``dy`` in every cell to the right, which a running sum along the row delivers.
    """
    height, width = shape
    own = np.zeros((height, width + 1))
    carry = np.zeros((height, width + 1))
    for p, q in zip(points, np.roll(points, -1, axis=0), strict=True):
        t = _cuts(p, q, shape)
        y, x = p[0] + t * (q[0] - p[0]), p[1] + t * (q[1] - p[1])
        dy, ym, xm = np.diff(y), (y[1:] + y[:-1]) / 2, (x[1:] + x[:-1]) / 2
        row, col = np.floor(ym).astype(int), np.floor(xm).astype(int)
        kept = (row >= 0) & (row < height) & (col < width) & (dy != 0)
        row, col, dy, xm = row[kept], col[kept], dy[kept], xm[kept]
        left = col < 0
        col = np.where(left, -1, col)
        np.add.at(own, (row, col + 1), np.where(left, 0.0, dy * (col + 1 - xm)))
        np.add.at(carry, (row, col + 1), dy)
    cover = own[:, 1:] + np.cumsum(carry, axis=1)[:, :-1]
    return np.clip(np.abs(cover), 0.0, 1.0)


def _cuts(p: Floats, q: Floats, shape: tuple[int, int]) -> Floats:
    """Return the sorted parameters in [0, 1] at which p→q meets a grid line of the crop."""
    parts = [np.array([0.0, 1.0])]
    for a, b, n in zip(p, q, shape, strict=True):
        if a == b:
            continue
        low, high = max(math.ceil(min(a, b)), 0), min(math.floor(max(a, b)), n)
        if low <= high:
            parts.append((np.arange(low, high + 1) - a) / (b - a))
    return np.unique(np.clip(np.concatenate(parts), 0.0, 1.0))


def _centers_in_polygon(points: Floats, shape: tuple[int, int]) -> NDArray[np.bool_]:
    """Tell which cell centres lie inside or on the border, by crossings to the right."""
    y = np.arange(shape[0])[:, None] + 0.5
    x = np.arange(shape[1])[None, :] + 0.5
    inside = np.zeros(shape, bool)
    border = np.zeros(shape, bool)
    for (y0, x0), (y1, x1) in zip(points, np.roll(points, -1, axis=0), strict=True):
        cross = (x1 - x0) * (y - y0) - (y1 - y0) * (x - x0)
        length = math.hypot(y1 - y0, x1 - x0)
        within = (x - x0) * (x - x1) + (y - y0) * (y - y1) <= 0
        border |= (np.abs(cross) <= 1e-9 * max(length, 1.0)) & within
        spans = (y0 <= y) != (y1 <= y)
        if y0 != y1:
            inside ^= spans & (x < x0 + (y - y0) * (x1 - x0) / (y1 - y0))
    return inside | border
