"""Coverage: which fraction of each pixel lies inside a region, exactly.

Pixel (r, c) is the square [r - 1/2, r + 1/2] × [c - 1/2, c + 1/2] of index space, so on a grid
with its own row and column spacing a disc in mm is an ellipse in pixels; nothing here samples or
subdivides.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.errors import ArgumentError, RegionError
from ct_measure_plugin.physics.coverage_grid import (
    Coverage,
    Grid,
    Rule,
    share_outside,
    share_outside_by_centers,
)
from ct_measure_plugin.physics.coverage_polygon import polygon_coverage
from ct_measure_plugin.physics.regions import (
    Box,
    Disc,
    Ellipse,
    Ellipsoid,
    Labels,
    Mask,
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

__all__ = ["Coverage", "Rule", "centres_inside", "plane_coverage", "reach_of", "slices_of"]


def plane_coverage(
    region: Region,
    shape: tuple[int, int],
    *,
    spacing_mm: tuple[float, float],
    origin_mm: tuple[float, float] = (0.0, 0.0),
    rule: Rule = "area",
    z_mm: float = 0.0,
    slab_mm: float = 0.0,
) -> Coverage:
    """Return the coverage of a region on one slice.

    Parameters
    ----------
    region : Region
        Disc, Ellipse, Ellipsoid, Box, Polygon, Segment or Path with a width, or Mask.
    shape : (int, int)
        Rows and columns of the image.
    spacing_mm, origin_mm : (float, float)
        dy, dx, and the y, x of the centre of pixel (0, 0).
    rule : {"area", "center"}
        "area": the exact fraction of each pixel. "center": 1 where the pixel's centre lies inside
        or on the border, else 0.
    z_mm : float
        The slice's position; an Ellipsoid and a deep Mask ask for it.
    slab_mm : float
        How thick a slab the slice stands for: an Ellipsoid or a deep Mask covers it by the mean
        over the slab, so that slabs side by side hold its volume. 0 takes the section at `z_mm`,
        as the rule "center" always does.

    Returns
    -------
    Coverage

    Raises
    ------
    RegionError
        For a Segment or a Path without width, which has no area, and for a Path whose strip
        overlaps itself.

    Examples
    --------
    >>> disc = Disc((20.0, 21.3), 9.3)
    >>> cover = plane_coverage(disc, (64, 64), spacing_mm=(0.7, 0.7))
    >>> bool(np.isclose(cover.weights.sum() * 0.7**2, disc.area_mm2, rtol=1e-12))
    True
    """
    if rule not in ("area", "center"):
        raise ArgumentError("rule", "must be 'area' or 'center'", rule)
    grid = Grid(shape, spacing_mm, origin_mm)
    if isinstance(region, Disc):
        region = Ellipse(region.center_mm, (region.radius_mm, region.radius_mm))
    if isinstance(region, Segment):
        region = _as_box(region)
    if isinstance(region, Path):
        region = region.strip()
    if isinstance(region, Ellipsoid):
        section = region.section(z_mm, slab_mm if rule == "area" else 0.0)
        if section is None:
            return Coverage(np.zeros((0, 0)), slice(0, 0), slice(0, 0), 0.0)
        region = section
    if isinstance(region, Ellipse):
        return _ellipse(region, grid, rule)
    if isinstance(region, Box | Polygon):
        return polygon_coverage(np.asarray(region.vertices_mm, float), region.area_mm2, grid, rule)
    if isinstance(region, Mask):
        return _mask(region, grid, rule, (z_mm, slab_mm))
    kinds = "disc, ellipse, ellipsoid, box, polygon, segment, path or mask"
    raise RegionError("region", f"must be a {kinds}", region)


def centres_inside(region: Region, volume: Volume, k: int) -> Coverage:
    """Return the pixels of a volume's slice whose centres lie in a region, each of weight 1.

    >>> from ct_measure_plugin.physics.volume import Volume
    >>> volume = Volume(np.zeros((6, 4, 4)), spacing_mm=(2.0, 1.0, 1.0))
    >>> float(centres_inside(Disc((1, 1), 1), volume, 2).weights.sum())
    5.0
    """
    return plane_coverage(
        region,
        (volume.shape[1], volume.shape[2]),
        spacing_mm=volume.spacing_mm[1:],
        origin_mm=volume.origin_mm[1:],
        rule="center",
        z_mm=float(volume.positions_mm[k]),
    )


def slices_of(region: Region, volume: Volume, *, rule: Rule = "area") -> list[int]:
    """Return the indices of the slices a region lies on, in order; empty if it misses them all.

    A slice belongs to a range when its centre does, and then counts as a whole. It belongs to an
    ellipsoid or a deep mask when any part of its slab does, with the rule "center" when its centre
    does.

    >>> from ct_measure_plugin.physics.volume import Volume
    >>> volume = Volume(np.zeros((6, 4, 4)), spacing_mm=(2.0, 1.0, 1.0))
    >>> slices_of(Disc((1, 1), 1, z_mm=(1.0, 6.0)), volume)
    [1, 2, 3]
    """
    positions = volume.positions_mm
    margin = 1e-6
    own = _own_reach(region)
    if own is not None:
        low, high = own
        margin = volume.spacing_mm[0] / 2 - 1e-6 if rule == "area" else 1e-6
    elif region.z_mm is None:
        return list(range(len(positions)))
    elif isinstance(region.z_mm, tuple):
        low, high = region.z_mm
    else:
        try:
            return [volume.nearest_slice(region.z_mm)]
        except ArgumentError:
            return []
    inside = (positions >= low - margin) & (positions <= high + margin)
    return [int(k) for k in np.flatnonzero(inside)]


def reach_of(region: Region) -> tuple[float, float] | None:
    """Return the lowest and highest z of a region that spans several slices; None for the others.

    >>> reach_of(Ellipsoid((0, 0), (3, 3), 4.0, z_mm=10.0))
    (6.0, 14.0)
    """
    own = _own_reach(region)
    return region.z_mm if own is None and isinstance(region.z_mm, tuple) else own


def _own_reach(region: Region) -> tuple[float, float] | None:
    """Return the lowest and highest z of a region whose form says it."""
    if isinstance(region, Ellipsoid) and isinstance(region.z_mm, int | float):
        return region.z_mm - region.z_radius_mm, region.z_mm + region.z_radius_mm
    pixels = region.inside if isinstance(region, Mask) else None
    if isinstance(region, Labels):
        pixels = region.labels
    if isinstance(region, Mask | Labels) and pixels is not None and pixels.ndim == 3:
        used = np.flatnonzero(pixels.any(axis=(1, 2)))
        if not len(used):
            return None
        step = region.spacing_mm[0]
        first = region.origin_mm[0] - step / 2
        return first + float(used[0]) * step, first + float(used[-1] + 1) * step
    return None


def _as_box(segment: Segment) -> Box:
    if segment.width_mm <= 0:
        raise RegionError("width_mm", "must be greater than 0 to enclose pixels", segment.width_mm)
    (y0, x0), (y1, x1) = segment.start_mm, segment.end_mm
    return Box(
        ((y0 + y1) / 2, (x0 + x1) / 2),
        (segment.width_mm, segment.length_mm),
        math.degrees(math.atan2(y0 - y1, x1 - x0)),
    )


# --- ellipses ------------------------------------------------------------------------------------


def _ellipse(region: Ellipse, grid: Grid, rule: Rule) -> Coverage:
    (along_y, along_x), (across_y, across_x) = (
        direction(region.angle_deg),
        direction(region.angle_deg + 90),
    )
    (b, a), (dy, dx) = region.radii_mm, grid.spacing_mm
    cy, cx = (
        (c - o) / d for c, o, d in zip(region.center_mm, grid.origin_mm, (dy, dx), strict=True)
    )
    half_y = math.hypot(a * along_y, b * across_y) / dy
    half_x = math.hypot(a * along_x, b * across_x) / dx
    rows, columns = grid.crop((cy - half_y, cx - half_x), (cy + half_y, cx + half_x))
    y = (np.arange(rows.start, rows.stop) - cy)[:, None]
    x = (np.arange(columns.start, columns.stop) - cx)[None, :]
    # one pixel down and one right, as the affine map that makes the ellipse the unit disc has them
    down = along_y * dy / a, across_y * dy / b
    right = along_x * dx / a, across_x * dx / b
    u, v = down[0] * y + right[0] * x, down[1] * y + right[1] * x
    square = u * u + v * v
    if rule == "center":
        weights = (square <= 1.0 + 2e-12).astype(float)
        return Coverage(
            weights, rows, columns, share_outside_by_centers(region.area_mm2, grid, weights)
        )
    reach = (math.hypot(*down) + math.hypot(*right)) / 2  # no corner is farther from its centre
    weights = (square < 1.0).astype(float)
    border = (square <= (1.0 + reach) ** 2) & (square >= max(1.0 - reach, 0.0) ** 2)
    # corners in order around the pixel, last as first: four edges, each from one to the next
    corner_u = u[border] + (_HALF_DOWN * down[0] + _HALF_RIGHT * right[0])
    corner_v = v[border] + (_HALF_DOWN * down[1] + _HALF_RIGHT * right[1])
    inside = np.abs(_edges_in_disc(corner_u, corner_v).sum(axis=0))
    full = abs(down[0] * right[1] - down[1] * right[0])
    weights[border] = np.minimum(inside / full, 1.0)
    return Coverage(weights, rows, columns, share_outside(weights, region.area_mm2, grid))


#: Half pixels down and right from a pixel's centre to its corners, in order, last as first.
_HALF_DOWN = 0.5 * np.array([-1.0, -1.0, 1.0, 1.0, -1.0])[:, None]
_HALF_RIGHT = 0.5 * np.array([-1.0, 1.0, 1.0, -1.0, -1.0])[:, None]


def _edges_in_disc(u: Floats, v: Floats) -> Floats:
    """Return the signed area that each edge and the origin enclose within the unit disc.

    `u` and `v` hold corners, shape (edges + 1, n); edge k runs from corner k to corner k + 1.
    Summed over a polygon's edges this is the area of polygon ∩ disc: the part of an edge inside
    the disc counts as a triangle, the parts outside as circular sectors.
    """
    pu, pv, qu, qv = u[:-1], v[:-1], u[1:], v[1:]
    du, dv = qu - pu, qv - pv
    dd = du * du + dv * dv
    pd = pu * du + pv * dv
    root = np.sqrt(np.maximum(pd * pd - dd * (pu * pu + pv * pv - 1.0), 0.0))
    t1 = np.minimum(np.maximum((-pd - root) / dd, 0.0), 1.0)
    t2 = np.minimum(np.maximum((-pd + root) / dd, 0.0), 1.0)
    au, av, bu, bv = pu + t1 * du, pv + t1 * dv, pu + t2 * du, pv + t2 * dv
    area: Floats = au * bv - av * bu
    area += np.arctan2(pu * av - pv * au, pu * au + pv * av)
    area += np.arctan2(bu * qv - bv * qu, bu * qu + bv * qv)
    return 0.5 * area


# --- masks ---------------------------------------------------------------------------------------


def _mask(region: Mask, grid: Grid, rule: Rule, slab: tuple[float, float]) -> Coverage:
    flat = region.inside
    if flat.ndim == 3:
        flat = _slab_of(region, *slab, rule)
    if not flat.any():
        return Coverage(np.zeros((0, 0)), slice(0, 0), slice(0, 0), 0.0)
    used_rows, used_columns = np.flatnonzero(flat.any(1)), np.flatnonzero(flat.any(0))
    y0, x0 = int(used_rows[0]), int(used_columns[0])
    flat = flat[y0 : used_rows[-1] + 1, x0 : used_columns[-1] + 1]
    step = np.asarray(region.spacing_mm[1:])
    first_mm = np.asarray(region.origin_mm[1:]) + step * (y0, x0)
    low_mm, high_mm = first_mm - step / 2, first_mm + step * (np.asarray(flat.shape) - 0.5)
    rows, columns = grid.crop(grid.index(low_mm), grid.index(high_mm))
    axes = []
    for axis, span in enumerate((rows, columns)):
        centers = grid.origin_mm[axis] + grid.spacing_mm[axis] * np.arange(span.start, span.stop)
        axes.append(
            _overlap(centers, grid.spacing_mm[axis], first_mm[axis], step[axis], flat.shape[axis])
        )
    weights = np.clip(axes[0] @ flat.astype(float) @ axes[1].T, 0.0, 1.0)
    area = float(flat.sum()) * float(step[0] * step[1])
    outside = share_outside(weights, area, grid)
    if rule == "center":
        weights = (weights >= 0.5).astype(float)
    return Coverage(weights, rows, columns, outside)


def _slab_of(region: Mask, z_mm: float, slab_mm: float, rule: Rule) -> NDArray[Any]:
    """Return the share of each mask pixel's column that lies inside, within a slab."""
    step, count = region.spacing_mm[0], len(region.inside)
    k = round((z_mm - region.origin_mm[0]) / step)
    aligned = abs(slab_mm - step) + abs(region.origin_mm[0] + k * step - z_mm) < 1e-6 * step
    if aligned or slab_mm <= 0 or rule == "center":
        return region.inside[k] if 0 <= k < count else np.zeros(region.inside.shape[1:], bool)
    share = _overlap(np.array([z_mm]), slab_mm, region.origin_mm[0], step, count)[0]
    used = np.flatnonzero(share)
    mixed: Floats = np.tensordot(share[used], region.inside[used].astype(float), axes=1)
    return mixed


def _overlap(centers: Floats, width: float, first: float, step: float, count: int) -> Floats:
    """Return which share of each pixel (rows) each mask pixel (columns) covers along one axis."""
    cells = first + step * np.arange(count)
    low = np.maximum(centers[:, None] - width / 2, cells[None, :] - step / 2)
    high = np.minimum(centers[:, None] + width / 2, cells[None, :] + step / 2)
    share: Floats = np.clip(high - low, 0.0, None) / width
    share[share < 1e-9] = 0.0  # neighbours that only touch, within rounding
    return share
