"""Regions as outlines on the pixels of a slice, as a structured report draws them.

Coordinates are (column, row) with the corner of the first pixel at (0, 0) and its centre at
(0.5, 0.5) (PS3.3, C.18.6.1.1). A form that reaches beyond the image is cut off there.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from ct_measure_plugin.physics.coverage import slices_of
from ct_measure_plugin.physics.regions import (
    Box,
    Disc,
    Ellipse,
    Ellipsoid,
    Path,
    Polygon,
    Region,
    Segment,
    direction,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.volume import Volume

    Floats = NDArray[np.float64]

__all__ = ["Outline", "outlines_of"]

#: corners of an ellipse that has to be cut: its area as a polygon is 0.02 % too small
_CORNERS: Final = 180


@dataclass(frozen=True, slots=True, eq=False)
class Outline:
    """The outline of a region on one slice.

    Attributes
    ----------
    index : int
        The slice.
    graphic : {"CIRCLE", "ELLIPSE", "POLYLINE"}
        How `points` are meant: centre and a point of the circle; the ends of the long axis, then of
        the short one; a closed line.
    points : ndarray, shape (n, 2)
        (column, row) pairs.
    """

    index: int
    graphic: str
    points: Floats


def outlines_of(region: Region, volume: Volume) -> list[Outline]:
    """Return a region's outline on every slice it lies on; empty where it has none to draw.

    Masks, and lines and paths without a width, have no outline.
    """
    found = []
    for index in slices_of(region, volume):
        outline = _outline(region, volume, index)
        if outline is not None:
            found.append(outline)
    return found


def _outline(region: Region, volume: Volume, index: int) -> Outline | None:
    form: Region | None = region
    if isinstance(region, Ellipsoid):
        form = region.section(float(volume.positions_mm[index]), volume.spacing_mm[0])
    if isinstance(form, Disc):
        form = Ellipse(form.center_mm, (form.radius_mm, form.radius_mm))
    if isinstance(form, Segment) and form.width_mm > 0:
        form = _band(form)
    if isinstance(form, Path) and form.width_mm > 0:
        form = form.strip()
    if isinstance(form, Ellipse):
        return _ellipse(form, volume, index)
    if isinstance(form, Box | Polygon):
        return _closed(_pixels(np.array(form.vertices_mm, dtype=float), volume), volume, index)
    return None


def _band(line: Segment) -> Polygon:
    """Return the strip of a line with a width."""
    start, end = np.array(line.start_mm), np.array(line.end_mm)
    along = (end - start) / line.length_mm
    aside = np.array([-along[1], along[0]]) * line.width_mm / 2
    corners = [start - aside, end - aside, end + aside, start + aside]
    return Polygon(tuple((float(y), float(x)) for y, x in corners))


def _pixels(points_mm: Floats, volume: Volume) -> Floats:
    """Return (column, row) of points (y, x) in millimetres."""
    origin, step = np.array(volume.origin_mm[1:]), np.array(volume.spacing_mm[1:])
    place: Floats = (points_mm - origin) / step + 0.5
    return place[:, ::-1]


def _ellipse(form: Ellipse, volume: Volume, index: int) -> Outline | None:
    """Return an ellipse; pixels that are not square make another one of it, with other axes."""
    dy, dx = volume.spacing_mm[1:]
    across, along = form.radii_mm
    second = np.array(direction(form.angle_deg)) * along
    first = np.array(direction(form.angle_deg + 90.0)) * across
    # columns: the half axes in pixels, (column, row); the unit circle through them is the ellipse
    axes = np.stack([second, first], axis=1)[::-1] / np.array([[dx], [dy]])
    center = _pixels(np.array([form.center_mm], dtype=float), volume)[0]
    turned, radii, _ = np.linalg.svd(axes)
    long, short = turned[:, 0] * radii[0], turned[:, 1] * radii[1]
    reach = np.hypot.reduce(axes, axis=1)
    if not _inside(np.stack([center - reach, center + reach]), volume):
        angle = np.linspace(0, 2 * np.pi, _CORNERS, endpoint=False)
        rim = center + np.stack([np.cos(angle), np.sin(angle)], axis=1) @ axes.T
        return _closed(rim, volume, index)
    if radii[0] - radii[1] < 1e-9 * radii[0]:
        return Outline(index, "CIRCLE", np.stack([center, center + np.array([radii[0], 0.0])]))
    ends = [center - long, center + long, center - short, center + short]
    return Outline(index, "ELLIPSE", np.stack(ends))


def _inside(points: Floats, volume: Volume) -> bool:
    limits = np.array([volume.shape[2], volume.shape[1]])
    return bool(np.all(points >= 0) and np.all(points <= limits))


def _closed(points: Floats, volume: Volume, index: int) -> Outline | None:
    if not _inside(points, volume):
        points = _cut(points, volume)
    if len(points) < 3:
        return None
    return Outline(index, "POLYLINE", np.concatenate([points, points[:1]]))


def _cut(points: Floats, volume: Volume) -> Floats:
    """Return a polygon without what lies beyond the image, edge by edge of it."""
    for axis, limit in ((0, volume.shape[2]), (1, volume.shape[1])):
        for bound, sign in ((0.0, 1.0), (float(limit), -1.0)):
            points = _beyond(points, axis, bound, sign)
    return points


def _beyond(points: Floats, axis: int, bound: float, sign: float) -> Floats:
    """Cut a polygon by one line; what lies on the side of `sign` is kept."""
    kept: list[Any] = []
    for here, after in zip(points, np.roll(points, -1, axis=0), strict=True):
        a, b = sign * (here[axis] - bound), sign * (after[axis] - bound)
        if a >= 0:
            kept.append(here)
        if a * b < 0:
            crossing = here + (after - here) * (a / (a - b))
            crossing[axis] = bound
            kept.append(crossing)
    return np.array(kept, dtype=float).reshape(-1, 2)
