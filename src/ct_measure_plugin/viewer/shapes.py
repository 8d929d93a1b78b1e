"""Shapes layers and regions: what is drawn in the viewer, as millimetres in a Volume's frame.

A shape on a flat Shapes layer lies on every slice and is measured on the one shown; a shape on a
deep layer lies on its own slice. A shape that cannot be a region (a line, a polygon that crosses
itself) is kept with the reason, so that its row in a table can say it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.errors import CtMeasureError
from ct_measure_plugin.physics.regions import Box, Disc, Ellipse, Polygon, Region, Segment

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.viewer.layers import Placement

    Floats = NDArray[np.float64]

__all__ = [
    "NAME",
    "Drawn",
    "drawn_on",
    "names_on",
    "new_regions_layer",
    "rename",
    "repair",
    "shape_of",
]

#: The column of a layer's features that holds what people call a shape.
NAME = "name"

#: Relative difference up to which two half axes are one radius, and a cosine is a right angle:
#: napari stores corners as float32, whose rounding is 6e-8 of a coordinate.
_ROUNDING = 1e-5


@dataclass(frozen=True, slots=True)
class Drawn:
    """One shape.

    Attributes
    ----------
    index : int
        Its place on the layer, now; it shifts when another is deleted.
    name : str
        What people call it.
    region : Region or None
        Where it lies, mm; None if it cannot be a region.
    problem : str
        Why not.
    """

    index: int
    name: str
    region: Region | None
    problem: str = ""


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
    to_index = _to_index(layer, placement, point)
    names = names_on(layer)
    return tuple(
        _drawn(i, names[i], str(kind), to_index(np.asarray(corners, dtype=float)), placement)
        for i, (kind, corners) in enumerate(zip(layer.shape_type, layer.data, strict=True))
    )


def names_on(layer: Any) -> list[str]:
    """Return what people call the shapes: the feature `name`, else "region 1" and so on."""
    known = list(layer.features[NAME]) if NAME in layer.features else []
    found = []
    for i in range(layer.nshapes):
        given = known[i] if i < len(known) else ""
        text = given.strip() if isinstance(given, str) else ""
        found.append(text or f"region {i + 1}")
    return found


def rename(layer: Any, index: int, name: str) -> None:
    """Give a shape a name; other columns of the features stay as they are."""
    features = layer.features.copy()
    known = list(features[NAME]) if NAME in features else [""] * layer.nshapes
    known += [""] * (layer.nshapes - len(known))
    known[index] = name.strip()
    features[NAME] = known[: len(features)] if len(features) else known
    layer.features = features


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
        scale=image.scale,
        translate=image.translate,
        rotate=image.rotate,
        shear=image.shear,
        affine=image.affine,
        units=image.units,
        axis_labels=image.axis_labels,
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
    if isinstance(region, Ellipse):
        size = (2 * region.radii_mm[0], 2 * region.radii_mm[1])
        return np.asarray(Box(region.center_mm, size, region.angle_deg).vertices_mm), "ellipse"
    if isinstance(region, Box):
        return np.asarray(region.vertices_mm), "rectangle"
    if isinstance(region, Polygon):
        return np.asarray(region.vertices_mm), "polygon"
    if isinstance(region, Segment):
        return np.asarray([region.start_mm, region.end_mm]), "line"
    raise ValueError(region.kind)


def _to_index(layer: Any, placement: Placement, point: Sequence[float]) -> Any:
    """Return a function from a shape's corners to voxel coordinates (slice, row, column).

    The way leads through the world and is affine, so it is taken from one call an axis; napari
    turns only one point at a time.
    """
    n = layer.ndim
    stand = np.asarray(point, dtype=float)

    def through(data: Floats) -> Floats:
        world = np.asarray(layer.data_to_world(data), dtype=float)
        full = np.concatenate([stand[: max(0, len(stand) - n)], world]) if len(stand) > n else world
        depth = placement.layer.ndim
        return np.asarray(placement.index_of(tuple(full[-depth:])))

    zero = through(np.zeros(n))
    matrix = np.stack([through(np.eye(n)[i]) - zero for i in range(n)], axis=1)

    def to_index(corners: Floats) -> Floats:
        return np.asarray(corners @ matrix.T + zero)

    return to_index


def _drawn(index: int, name: str, kind: str, corners: Floats, placement: Placement) -> Drawn:
    volume = placement.volume
    slices = np.rint(corners[:, 0]).astype(int)
    if len(set(slices.tolist())) > 1:
        return Drawn(index, name, None, "its corners lie on different slices")
    if not 0 <= slices[0] < volume.shape[0]:
        return Drawn(index, name, None, "it lies above or below the volume")
    z = float(volume.positions_mm[slices[0]])
    step, origin = np.asarray(volume.spacing_mm[1:]), np.asarray(volume.origin_mm[1:])
    flat = corners[:, 1:] * step + origin
    try:
        return Drawn(index, name, _region(kind, flat, z, name))
    except CtMeasureError as error:
        return Drawn(index, name, None, str(error))
    except _NoAreaError as error:
        return Drawn(index, name, None, str(error))


class _NoAreaError(Exception):
    """A shape without an inside."""


def _region(kind: str, corners: Floats, z_mm: float, name: str) -> Region:
    if kind in ("line", "path"):
        raise _NoAreaError(f"a {kind} has no area; draw an ellipse, a rectangle or a polygon")
    if kind == "ellipse":
        return _ellipse(corners, z_mm, name)
    if kind == "rectangle":
        return _rectangle(corners, z_mm, name)
    return Polygon(tuple(_pair(corner) for corner in corners), z_mm=z_mm, name=name)


def _pair(corner: Floats) -> tuple[float, float]:
    return float(corner[0]), float(corner[1])


def _halves(corners: Floats) -> tuple[tuple[float, float], Floats, Floats]:
    """Return the centre and the two half sides of a parallelogram."""
    return _pair(corners.mean(axis=0)), (corners[1] - corners[0]) / 2, (corners[3] - corners[0]) / 2


def _ellipse(corners: Floats, z_mm: float, name: str) -> Region:
    """Return the ellipse that touches a parallelogram's sides in their middles.

    The half sides are conjugate half diameters; the singular values of their matrix are the half
    axes, whatever stretches the image's pixels bring.
    """
    center, u, v = _halves(corners)
    directions, radii, _ = np.linalg.svd(np.stack([u, v], axis=1))
    if radii[1] <= 0:
        raise _NoAreaError("it has no area")
    if radii[0] - radii[1] <= _ROUNDING * radii[0]:
        return Disc(center, float(radii.mean()), z_mm=z_mm, name=name)
    y, x = directions[:, 0]
    angle = math.degrees(math.atan2(-y, x)) % 180.0
    return Ellipse(center, (float(radii[1]), float(radii[0])), angle, z_mm=z_mm, name=name)


def _rectangle(corners: Floats, z_mm: float, name: str) -> Region:
    center, u, v = _halves(corners)
    long_u, long_v = float(np.linalg.norm(u)), float(np.linalg.norm(v))
    if min(long_u, long_v) <= 0:
        raise _NoAreaError("it has no area")
    if abs(float(u @ v)) > _ROUNDING * long_u * long_v:
        return Polygon(tuple(_pair(corner) for corner in corners), z_mm=z_mm, name=name)
    width, height = (u, v) if abs(u[1]) >= abs(v[1]) else (v, u)
    angle = math.degrees(math.atan2(-width[0], width[1]))
    angle = (angle + 90.0) % 180.0 - 90.0
    size = 2 * float(np.linalg.norm(height)), 2 * float(np.linalg.norm(width))
    return Box(center, size, angle, z_mm=z_mm, name=name)
