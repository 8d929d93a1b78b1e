"""Square patches laid out inside a region: on a grid, overlapping, or on a ring."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Literal, TypeAlias

import numpy as np

from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.coverage import Coverage

    Whole = NDArray[np.intp]
    Flags = NDArray[np.bool_]

__all__ = ["LAYOUTS", "Layout", "grid_corners", "lay_patches", "ring_corners"]

Layout: TypeAlias = Literal["grid", "ring"]
LAYOUTS: tuple[Layout, ...] = ("grid", "ring")

#: Radius of a ring of patches where none is given, as a share of the region's own.
RING_SHARE = 0.6


def lay_patches(
    cover: Coverage,
    *,
    spacing_mm: tuple[float, float],
    size_px: int = 64,
    layout: Layout = "grid",
    overlap: float = 0.0,
    radius_mm: float | None = None,
    center_px: tuple[float, float] | None = None,
) -> Whole:
    """Return the corners of the square patches that fit into a region, shape (n, 2).

    Parameters
    ----------
    cover : Coverage
        The region on its slice, by the pixel-centre rule; a patch lies wholly inside.
    spacing_mm : (float, float)
        dy and dx.
    size_px : int
        Pixels along a side.
    layout : {"grid", "ring"}
        Rows and columns, shifted so that the most patches fit; or centres evenly spread on a
        circle, where the noise of a cylinder is alike.
    overlap : float
        Share of a side that neighbours have in common, 0 to 0.9.
    radius_mm : float, optional
        Of the ring; by default 0.6 of the radius of a disc of the region's area.
    center_px : (float, float), optional
        Row and column of the ring's centre; by default the region's centroid.

    Returns
    -------
    ndarray of int, shape (n, 2)
        Row and column of each patch's first pixel; empty if none fits.

    Examples
    --------
    >>> from ct_measure_plugin.physics.coverage import plane_coverage
    >>> from ct_measure_plugin.physics.regions import Box
    >>> box = Box((31.5, 31.5), (64, 64))
    >>> cover = plane_coverage(box, (80, 80), spacing_mm=(1, 1), rule="center")
    >>> lay_patches(cover, spacing_mm=(1, 1), size_px=32).tolist()
    [[0, 0], [0, 32], [32, 0], [32, 32]]
    """
    if size_px < 2:
        raise ArgumentError("size_px", "must be at least 2", size_px)
    if not 0 <= overlap <= 0.9:
        raise ArgumentError("overlap", "must lie within 0 to 0.9", overlap)
    if layout not in LAYOUTS:
        raise ArgumentError("layout", f"must be one of {', '.join(LAYOUTS)}", layout)
    inside = cover.weights > 0.5
    if min(inside.shape, default=0) < size_px:
        return np.zeros((0, 2), dtype=np.intp)
    first = np.array([cover.rows.start, cover.columns.start], dtype=np.intp)
    step = max(1, round(size_px * (1.0 - overlap)))
    if layout == "grid":
        return grid_corners(inside, size_px, step) + first
    if center_px is None:
        center = np.argwhere(inside).mean(axis=0)
    else:
        center = np.asarray(center_px, dtype=float) - first
    if radius_mm is None:
        area = float(inside.sum()) * spacing_mm[0] * spacing_mm[1]
        radius_mm = RING_SHARE * math.sqrt(area / math.pi)
    radii = radius_mm / spacing_mm[0], radius_mm / spacing_mm[1]
    return ring_corners(inside, size_px, step, (float(center[0]), float(center[1])), radii) + first


def _fits(inside: Flags, size: int) -> Flags:
    """Tell at which corners a whole patch lies inside."""
    total = np.zeros((inside.shape[0] + 1, inside.shape[1] + 1), dtype=np.int64)
    total[1:, 1:] = np.cumsum(np.cumsum(inside, axis=0), axis=1)
    count = (
        total[size:, size:] - total[:-size, size:] - total[size:, :-size] + total[:-size, :-size]
    )
    fits: Flags = count == size * size
    return fits


def grid_corners(inside: Flags, size: int, step: int) -> Whole:
    """Return the corners of a grid of patches, shifted so that the most of them fit.

    Of equally good shifts the one most nearly centred on the region is taken.

    Parameters
    ----------
    inside : ndarray of bool, shape (ny, nx)
        The region.
    size, step : int
        Side of a patch and distance of neighbours.
    """
    fits = _fits(inside, size)
    rows, columns = (math.ceil(n / step) * step for n in fits.shape)
    padded = np.zeros((rows, columns), dtype=bool)
    padded[: fits.shape[0], : fits.shape[1]] = fits
    counts = padded.reshape(rows // step, step, columns // step, step).sum(axis=(0, 2))
    if not counts.any():
        return np.zeros((0, 2), dtype=np.intp)
    middle = np.argwhere(inside).mean(axis=0)
    best, nearest = None, math.inf
    for oy, ox in np.argwhere(counts == counts.max()):
        corners = np.argwhere(fits[oy::step, ox::step]) * step + (oy, ox)
        distance = float(np.hypot(*(corners.mean(axis=0) + (size - 1) / 2 - middle)))
        if distance < nearest - 1e-9:
            best, nearest = corners, distance
    return np.asarray(best, dtype=np.intp)


def ring_corners(
    inside: Flags,
    size: int,
    step: int,
    center: tuple[float, float],
    radius: tuple[float, float],
) -> Whole:
    """Return the corners of patches whose centres are evenly spread on a circle.

    Parameters
    ----------
    inside : ndarray of bool, shape (ny, nx)
        The region.
    size, step : int
        Side of a patch, and least distance of neighbours along one axis.
    center, radius : (float, float)
        Row and column of the circle's centre, and its radius in rows and columns.
    """
    fits = _fits(inside, size)
    most = max(1, int(2 * math.pi * max(radius) / step))
    for number in range(most, 0, -1):
        angle = 2 * math.pi * np.arange(number) / number
        middle = np.stack(
            [center[0] - radius[0] * np.sin(angle), center[1] + radius[1] * np.cos(angle)], axis=1
        )
        # halves are rounded away from the centre, alike on all sides
        exact = middle - (size - 1) / 2
        corners = np.rint(exact + 1e-6 * np.sign(middle - center)).astype(np.intp)
        apart = np.abs(corners[:, None] - corners[None]).max(axis=2)
        apart[np.arange(number), np.arange(number)] = step
        if apart.min() >= step:
            break
    within = np.all((corners >= 0) & (corners < fits.shape), axis=1)
    corners = corners[within]
    return corners[fits[corners[:, 0], corners[:, 1]]]
