"""Shapes layers and regions: what is drawn in the viewer, as millimetres in a Volume's frame.

A shape on a flat Shapes layer lies on every slice and is measured on the one shown; a shape on a
deep layer lies on its own slice, or over the slices that its features say. A line or a path is the
strip that its edge covers, as wide as it is drawn. A shape that cannot be a region (a polygon that
crosses itself) is kept with the reason, so that its row in a table can say it.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.errors import CtMeasureError
from ct_measure_plugin.physics.regions import (
    Box,
    Disc,
    Ellipse,
    Ellipsoid,
    Path,
    Polygon,
    Region,
    Segment,
)
from ct_measure_plugin.viewer.drawn import Drawn
from ct_measure_plugin.viewer.layer_frame import LayerFrame
from ct_measure_plugin.viewer.layer_geometry import lying_like
from ct_measure_plugin.viewer.region_features import ELLIPSOID, NAME, Tags, set_column, tags_on

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.physics.volume import Volume
    from ct_measure_plugin.viewer.layers import Placement

    Floats = NDArray[np.float64]

__all__ = [
    "Drawn",
    "NoRegionError",
    "drawn_on",
    "extent_of",
    "names_on",
    "new_regions_layer",
    "rename",
    "repair",
    "shape_of",
    "swept",
]

#: Relative difference up to which two half axes are one radius, and a cosine is a right angle:
#: napari stores corners as float32, whose rounding is 6e-8 of a coordinate.
_ROUNDING = 1e-5


def drawn_on(layer: Any, placement: Placement, point: Sequence[float]) -> tuple[Drawn, ...]:
    """Return every shape of a layer as a region of an image layer's Volume.

    Parameters
    ----------
    layer : napari.layers.Shapes
        Flat or deep, with its own scale, shift and rotation.
    placement : Placement
        The image layer measured.
    point : sequence of float
        Where the viewer stands (``viewer.dims.point``).
    """
    if not layer.nshapes:
        return ()
    frame = LayerFrame(layer, placement, point)
    tags = tags_on(layer)
    kinds, widths = [str(kind) for kind in layer.shape_type], layer.edge_width
    stretch = frame.stretch
    return tuple(
        _drawn(
            i, _Outline(kinds[i], frame.voxels(corners), widths[i] * stretch), tags[i], placement
        )
        for i, corners in enumerate(layer.data)
    )


def names_on(layer: Any) -> list[str]:
    """Return what people call the shapes: the feature `name`, else "region 1" and so on."""
    return [_name(i, tags) for i, tags in enumerate(tags_on(layer))]


def rename(layer: Any, index: int, name: str) -> None:
    """Give a shape a name; other columns of the features stay as they are."""
    set_column(layer, NAME, {index: name.strip()})


def repair(layer: Any) -> bool:
    """Mend a layer that a cancelled polygon left with a row of features too many.

    napari then colours the next shape wrongly and fails when switched to 3-D. Call it outside the
    layer's own events. Returns whether there was anything to mend.
    """
    if len(layer.features) == layer.nshapes:
        return False
    features = layer.features.iloc[: layer.nshapes].reset_index(drop=True)
    layer.data = list(zip(layer.data, layer.shape_type, strict=True))
    layer.features = features
    return True


def new_regions_layer(viewer: Any, image: Any, name: str = "Regions") -> Any:
    """Add an empty Shapes layer that lies just where an image layer lies, and return it."""
    return viewer.add_shapes(
        ndim=image.ndim,
        name=name,
        **lying_like(image),
        face_color="transparent",
        edge_color="#ffb000",
        edge_width=1,
    )


def shape_of(region: Region) -> tuple[Floats, str]:
    """Return a region's corners (n, 2) as y, x in mm and napari's word for the shape.

    Raises
    ------
    ValueError
        For a region that has no outline to draw.
    """
    if isinstance(region, Disc):
        region = Ellipse(region.center_mm, (region.radius_mm,) * 2)
    if isinstance(region, Ellipse | Ellipsoid):
        size = (2 * region.radii_mm[0], 2 * region.radii_mm[1])
        return np.asarray(Box(region.center_mm, size, region.angle_deg).vertices_mm), "ellipse"
    if isinstance(region, Box):
        return np.asarray(region.vertices_mm), "rectangle"
    if isinstance(region, Polygon):
        return np.asarray(region.vertices_mm), "polygon"
    if isinstance(region, Segment):
        return np.asarray([region.start_mm, region.end_mm]), "line"
    if isinstance(region, Path):
        return np.asarray(region.vertices_mm), "path"
    raise ValueError(region.kind)


def extent_of(tags: Tags, z_mm: float, volume: Volume) -> float | tuple[float, float] | None:
    """Return the slices that a region reaches over: its own, a range, or None for all.

    An infinite end means as far as the volume goes.
    """
    low, high = tags.z_mm
    if math.isnan(low) and math.isnan(high):
        return z_mm
    if low == -math.inf and high == math.inf:
        return None
    low = z_mm if math.isnan(low) else max(low, float(volume.positions_mm[0]))
    high = z_mm if math.isnan(high) else min(high, float(volume.positions_mm[-1]))
    return (low, high) if low <= high else (high, low)


def _name(index: int, tags: Tags) -> str:
    return tags.name or f"region {index + 1}"


class _Outline:
    """A shape as it lies in the image's voxels, with the width of its edge in mm."""

    __slots__ = ("kind", "voxels", "width")

    def __init__(self, kind: str, voxels: Floats, width: float) -> None:
        self.kind, self.voxels, self.width = kind, voxels, width


def _drawn(index: int, outline: _Outline, tags: Tags, placement: Placement) -> Drawn:
    try:
        region, problem = _region(outline, tags, placement.volume, _name(index, tags)), ""
    except (CtMeasureError, NoRegionError) as error:
        region, problem = None, str(error)
    return Drawn(index, _name(index, tags), region, problem, tags.group, tags.code)


class NoRegionError(Exception):
    """A shape that is no region."""


def _region(outline: _Outline, tags: Tags, volume: Volume, name: str) -> Region:
    slices = {round(float(k)) for k in outline.voxels[:, 0]}
    k = slices.pop()
    if slices:
        raise NoRegionError("its corners lie on different slices")
    if not 0 <= k < volume.shape[0]:
        raise NoRegionError("it lies above or below the volume")
    at = float(volume.positions_mm[k])
    words = {"z_mm": extent_of(tags, at, volume), "name": name, **tags.words()}
    step, origin = np.asarray(volume.spacing_mm[1:]), np.asarray(volume.origin_mm[1:])
    corners = outline.voxels[:, 1:] * step + origin
    flat = _flat_region(outline, corners, words)
    return swept(flat, volume) if tags.swept == ELLIPSOID else flat


def _flat_region(outline: _Outline, corners: Floats, words: dict[str, Any]) -> Region:
    if outline.kind == "line":
        ends = _pair(corners[0]), _pair(corners[1])
        return Segment(*ends, float(outline.width), **words)
    if outline.kind == "path":
        return _path(corners, float(outline.width), words)
    if outline.kind == "ellipse":
        return _ellipse(corners, words)
    if outline.kind == "rectangle":
        return _rectangle(corners, words)
    return Polygon(tuple(_pair(corner) for corner in corners), **words)


def swept(region: Region, volume: Volume) -> Region:
    """Return a disc or an ellipse over several slices as the ellipsoid that ends with them.

    It ends where the first and the last slice do, half a slice beyond their centres.

    Raises
    ------
    NoRegionError
        For a region of another kind, or on a single slice.
    """
    if isinstance(region, Disc):
        radii, angle = (region.radius_mm,) * 2, 0.0
    elif isinstance(region, Ellipse):
        radii, angle = region.radii_mm, region.angle_deg
    else:
        raise NoRegionError(f"a {region.kind} cannot be swept to an ellipsoid; an ellipse can")
    low, high = (volume.positions_mm[0], volume.positions_mm[-1])
    if isinstance(region.z_mm, tuple):
        low, high = region.z_mm
    elif region.z_mm is not None:
        raise NoRegionError("an ellipsoid needs several slices; give it a first and a last one")
    half = (float(high) - float(low) + volume.spacing_mm[0]) / 2
    middle = (float(low) + float(high)) / 2
    return Ellipsoid(
        region.center_mm, radii, half, angle,
        z_mm=middle, name=region.name, group=region.group, code=region.code, values=region.values,
    )  # fmt: skip


def _pair(corner: Floats) -> tuple[float, float]:
    return float(corner[0]), float(corner[1])


def _halves(corners: Floats) -> tuple[tuple[float, float], Floats, Floats]:
    """Return the centre and the two half sides of a parallelogram."""
    return _pair(corners.mean(axis=0)), (corners[1] - corners[0]) / 2, (corners[3] - corners[0]) / 2


def _path(corners: Floats, width: float, words: dict[str, Any]) -> Region:
    """Return a path; a corner drawn twice, as a double click draws the last one, counts once."""
    pairs = [_pair(corner) for corner in corners]
    kept = [pair for before, pair in zip([None, *pairs], pairs, strict=False) if pair != before]
    return Path(tuple(kept), width, **words)


def _ellipse(corners: Floats, words: dict[str, Any]) -> Region:
    """Return the ellipse that touches a parallelogram's sides in their middles.

    The half sides are conjugate half diameters; the singular values of their matrix are the half
    axes, whatever stretches the image's pixels bring.
    """
    center, u, v = _halves(corners)
    long, short, (y, x) = _half_axes(u, v)
    if short <= 0:
        raise NoRegionError("it has no area")
    if long - short <= _ROUNDING * long:
        return Disc(center, (long + short) / 2, **words)
    angle = math.degrees(math.atan2(-y, x)) % 180.0
    return Ellipse(center, (short, long), angle, **words)


def _half_axes(u: Floats, v: Floats) -> tuple[float, float, tuple[float, float]]:
    """Return the longer and the shorter half axis, and the direction (y, x) of the longer one."""
    long, short = math.hypot(*u), math.hypot(*v)
    if abs(float(u @ v)) <= 1e-9 * long * short:  # at right angles: they are the half axes
        (long, direction), (short, _) = sorted(((long, u), (short, v)), key=lambda one: -one[0])
        return long, short, _pair(direction)
    directions, radii, _ = np.linalg.svd(np.stack([u, v], axis=1))
    return float(radii[0]), float(radii[1]), _pair(directions[:, 0])


def _rectangle(corners: Floats, words: dict[str, Any]) -> Region:
    center, u, v = _halves(corners)
    long_u, long_v = float(np.linalg.norm(u)), float(np.linalg.norm(v))
    if min(long_u, long_v) <= 0:
        raise NoRegionError("it has no area")
    if abs(float(u @ v)) > _ROUNDING * long_u * long_v:
        return Polygon(tuple(_pair(corner) for corner in corners), **words)
    width, height = (u, v) if abs(u[1]) >= abs(v[1]) else (v, u)
    angle = math.degrees(math.atan2(-width[0], width[1]))
    angle = (angle + 90.0) % 180.0 - 90.0
    size = 2 * float(np.linalg.norm(height)), 2 * float(np.linalg.norm(width))
    return Box(center, size, angle, **words)
