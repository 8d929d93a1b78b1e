"""Where a wire or bead lies in each slice: one straight axis, found from all slices at once."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import ndimage

from ct_measure_plugin.physics.edge_line import pixel_grid
from ct_measure_plugin.physics.results import NotMeasured

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["WireTrace", "trace_wire"]

MOST_STEPS = 12

#: The axis is fitted to pixels within this many sigma of the Gaussian that stands for the wire.
CORE = 2.5


@dataclass(frozen=True, slots=True, eq=False)
class WireTrace:
    """A wire's places and the best Gaussian spots there.

    Attributes
    ----------
    centers : ndarray, shape (nz, 2)
        y and x from the middle of the image, mm, on a straight line.
    heights, levels : ndarray, shape (nz,)
        Height of the spot over its surroundings, and their value, in each slice.
    sigma : float
        Width of the spots, mm.
    shift : float
        How far the wire moves from slice to slice, mm.
    """

    centers: Floats
    heights: Floats
    levels: Floats
    sigma: float
    shift: float


def trace_wire(stack: Floats, spacing_mm: tuple[float, float]) -> WireTrace | NotMeasured:
    """Return the wire in slices, shape (nz, ny, nx).

    Notes
    -----
    Start: the pixel of each smoothed slice that departs most from its median, and the line through
    medians of slopes (Theil 1950). Then Gauss-Newton steps on the axis, a common sigma, and height
    and level of every slice. A Gaussian that does not fit still finds the centre of anything
    symmetric.
    """
    y, x = pixel_grid((stack.shape[1], stack.shape[2]), spacing_mm)
    centers, sign = _start(stack, y, x)
    index = np.arange(len(stack), dtype=np.float64) - (len(stack) - 1) / 2
    middle, slope = _robust_line(index, centers)
    pixel = max(spacing_mm)
    sigma = 1.5 * pixel
    heights, levels = np.zeros(0), np.zeros(0)
    for step in range(MOST_STEPS):
        found = _step(stack, y, x, middle + index[:, None] * slope, sigma, pixel)
        if found is None:
            return NotMeasured("no wire or bead was found in the box", "draw it around one")
        rows, heights, levels = found
        change = _solved(rows, index, len(stack))
        limit = pixel if step < 3 else pixel / 2
        moved = np.clip(change[:4], -limit, limit)
        middle, slope = middle + moved[:2], slope + (moved[2:4] if len(stack) > 1 else 0.0)
        grown = float(np.clip(change[4], -0.3 * sigma, 0.5 * sigma))
        sigma = max(sigma + grown, 0.35 * pixel)
        away = np.abs(middle) > [abs(y[0, 0]), abs(x[0, 0])]
        if away.any() or sigma > 0.5 * min(abs(y[0, 0]), abs(x[0, 0])):
            return NotMeasured("no wire or bead was found in the box", "draw it around one")
        if step > 3 and float(np.abs(moved).max()) < 1e-4 * pixel and abs(grown) < 1e-4 * sigma:
            break
    if not np.median(sign * heights) > 0:
        return NotMeasured("no wire or bead was found in the box", "draw it around one")
    return WireTrace(
        middle + index[:, None] * slope,
        heights,
        levels,
        sigma,
        float(np.hypot(*slope)),
    )


def _start(stack: Floats, y: Floats, x: Floats) -> tuple[Floats, float]:
    """Return the place of each slice's spot, shape (nz, 2), and the sign of its contrast."""
    smooth = np.stack([ndimage.gaussian_filter(p, 1.0, mode="nearest") for p in stack])
    smooth -= np.median(smooth, axis=(1, 2))[:, None, None]
    mean = smooth.mean(axis=0)
    sign = 1.0 if float(smooth.max()) >= -float(smooth.min()) else -1.0
    places = []
    for plane in (sign * smooth) if len(stack) > 1 else [sign * mean]:
        i, j = np.unravel_index(int(np.argmax(plane)), plane.shape)
        places.append((float(y[i, 0]), float(x[0, j])))
    return np.array(places), sign


def _robust_line(index: Floats, centers: Floats) -> tuple[Floats, Floats]:
    """Return middle and slope of a line through places, each shape (2,); outliers do not count."""
    if len(index) == 1:
        return centers[0], np.zeros(2)
    i, j = np.triu_indices(len(index), 1)
    slopes = (centers[j] - centers[i]) / (index[j] - index[i])[:, None]
    slope = np.median(slopes, axis=0)
    return np.median(centers - index[:, None] * slope, axis=0), slope


def _step(
    stack: Floats, y: Floats, x: Floats, centers: Floats, sigma: float, pixel: float
) -> tuple[list[Floats], Floats, Floats] | None:
    """Return for every slice the columns (y, x, sigma | what is left), heights and levels.

    Level and height are solved for in each slice and projected out of the columns.
    """
    rows, heights, levels = [], [], []
    for plane, center in zip(stack, centers, strict=True):
        v, u = y - center[0], x - center[1]
        near = v * v + u * u <= max(CORE * sigma, 1.6 * pixel) ** 2
        if int(near.sum()) < 7:
            return None
        v, u = np.broadcast_to(v, near.shape)[near], np.broadcast_to(u, near.shape)[near]
        square = (v * v + u * u) / sigma**2
        spot = np.exp(-0.5 * square)
        plain = np.stack([np.ones_like(spot), spot], axis=1)
        level, height = np.linalg.lstsq(plain, plane[near], rcond=None)[0]
        columns = height * spot * np.stack([v / sigma**2, u / sigma**2, square / sigma])
        both = np.vstack([columns, plane[near] - level - height * spot]).T
        both -= plain @ np.linalg.lstsq(plain, both, rcond=None)[0]
        rows.append(both)
        heights.append(float(height))
        levels.append(float(level))
    return rows, np.array(heights), np.array(levels)


def _solved(rows: list[Floats], index: Floats, n: int) -> Floats:
    """Return the changes of (y, x, slope y, slope x, sigma)."""
    normal, right = np.zeros((5, 5)), np.zeros(5)
    for k, both in zip(index, rows, strict=True):
        full = np.column_stack([both[:, :2], k * both[:, :2], both[:, 2]])
        normal += full.T @ full
        right += full.T @ both[:, 3]
    if n == 1:
        normal[2, 2] = normal[3, 3] = 1.0
    found: Floats = np.linalg.pinv(normal) @ right
    return found
