"""Regions onto layers: as outlines on Shapes and Points, as voxels on Labels."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.coverage import slices_of
from ct_measure_plugin.physics.regions import Disc, Ellipsoid, Mask, Path, Region, Segment
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.threshold import threshold_mask
from ct_measure_plugin.viewer.label_grid import NoGrid, grid_of
from ct_measure_plugin.viewer.layer_geometry import lying_like
from ct_measure_plugin.viewer.outlines import Outline, sort_of
from ct_measure_plugin.viewer.region_features import (
    CLASS,
    CODE,
    ELLIPSOID,
    HIGH,
    LOW,
    NAME,
    SWEPT,
    Z_HIGH,
    Z_LOW,
)
from ct_measure_plugin.viewer.shapes import shape_of

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.physics.volume import Volume
    from ct_measure_plugin.viewer.layer_frame import LayerFrame
    from ct_measure_plugin.viewer.placement import Placement

__all__ = ["new_labels_layer", "outline_of", "row_of", "voxels_of"]


def row_of(region: Region) -> dict[str, Any]:
    """Return what the features say about a region beside its outline."""
    low, high = region.values or (math.nan, math.nan)
    z_low, z_high = math.nan, math.nan
    if region.z_mm is None:
        z_low, z_high = -math.inf, math.inf
    elif isinstance(region.z_mm, tuple):
        z_low, z_high = region.z_mm
    return {
        NAME: region.name,
        CLASS: region.group,
        CODE: region.code,
        Z_LOW: z_low,
        Z_HIGH: z_high,
        SWEPT: "",
        LOW: low,
        HIGH: high,
    }


def outline_of(region: Region, frame: LayerFrame) -> Outline:
    """Return a region as a shape or a point of a layer.

    Parameters
    ----------
    region : Region
        In the frame of the image that the frame leads to. One on several slices is drawn on that
        nearest to the slice shown, and its features say over which it reaches.
    frame : LayerFrame
        Of the layer.

    Raises
    ------
    ArgumentError
        If the layer cannot show it: a mask on shapes, anything but a disc on points, or a region
        beyond the slices.
    """
    volume = frame.placement.volume
    if isinstance(region, Mask):
        raise ArgumentError(
            "region", "must have an outline; a mask belongs on a Labels layer", "mask"
        )
    slices = slices_of(region, volume, rule="center")
    if not slices:
        raise ArgumentError("region", "must lie within the image's slices", region.z_mm)
    shown = frame.placement.plane_of(tuple(frame.stand)[-frame.placement.layer.ndim :])
    k = min(slices, key=lambda one: abs(one - shown))
    row = row_of(region)
    if isinstance(region, Ellipsoid):
        row |= _ends_of(region, volume)
    if sort_of(frame.layer) == "points":
        if not isinstance(region, Disc):
            raise ArgumentError("region", "must be a disc on a Points layer", region.kind)
        corners = frame.from_planes([[k, *region.center_mm]])
        size = np.float64(2 * region.radius_mm / frame.stretch)
        return Outline(corners, "point", {"size": size}, row)
    flat, kind = shape_of(region)
    corners = frame.from_planes(np.c_[np.full(len(flat), float(k)), flat])
    looks = _looks(frame.layer)
    if isinstance(region, Segment | Path) and region.width_mm > 0:
        looks["edge_width"] = region.width_mm / frame.stretch
    return Outline(corners, kind, looks, row)


def _ends_of(region: Ellipsoid, volume: Volume) -> dict[str, Any]:
    """Return the slices whose slabs end where an ellipsoid does."""
    middle = float(region.z_mm)  # type: ignore[arg-type]
    half = region.z_radius_mm - volume.spacing_mm[0] / 2
    return {Z_LOW: middle - half, Z_HIGH: middle + half, SWEPT: ELLIPSOID}


def _looks(layer: Any) -> dict[str, Any]:
    """Return the looks that a newly drawn shape would have."""
    from napari.utils.colormaps.standardize_color import transform_color

    return {
        "edge_width": float(layer.current_edge_width),
        "edge_color": transform_color(layer.current_edge_color)[0],
        "face_color": transform_color(layer.current_face_color)[0],
        "z_index": 0,
    }


def new_labels_layer(viewer: Any, image: Any, name: str = "Labels") -> Any:
    """Add an empty Labels layer with just the voxels of an image layer, and return it."""
    data = image.data[0] if image.multiscale else image.data
    return viewer.add_labels(
        np.zeros(data.shape, np.uint16),
        name=name,
        **lying_like(image),
    )


def voxels_of(
    region: Region, layer: Any, placement: Placement, point: Sequence[float]
) -> tuple[NDArray[np.intp], ...]:
    """Return the voxels of a Labels layer that a region holds: those whose centre lies inside.

    Parameters
    ----------
    region : Region
        Its range of values, if it has one, counts.
    layer : napari.layers.Labels
        With the image's own voxels.
    placement : Placement
        The image.
    point : sequence of float
        Where the viewer stands.

    Raises
    ------
    ArgumentError
        If the layer has other voxels than the image, or no voxel of the region counts.
    """
    grid = grid_of(layer, placement, point)
    volume = placement.volume
    shape = volume.shape if layer.ndim > 2 else volume.shape[1:]
    if isinstance(grid, NoGrid) or grid.mirrored or grid.shape != shape or not _fits(grid, volume):
        raise ArgumentError("labels", "must have the image's own voxels", layer.name)
    low, high = region.values or (-math.inf, math.inf)
    mask = threshold_mask(volume, region, low, high)
    if isinstance(mask, NotMeasured):
        raise ArgumentError("region", "must hold voxels", mask.reason)
    box = grid.box_of(mask)
    inside = mask.inside
    if layer.ndim > 2 and inside.ndim == 2:
        k = volume.nearest_slice(float(mask.z_mm))  # type: ignore[arg-type]
        inside, box = inside[None], (slice(k, k + 1), *_flat_box(mask, volume))
    elif layer.ndim == 2 and inside.ndim == 3:
        raise ArgumentError("region", "must lie on one slice for a flat Labels layer", "several")
    found = np.nonzero(inside)
    at = tuple(axis + part.start for axis, part in zip(found, box, strict=True))
    ahead = tuple(np.full(len(found[0]), k, np.intp) for k in grid.leading)
    return (*ahead, *at)


def _fits(grid: Any, volume: Volume) -> bool:
    step = np.asarray(volume.spacing_mm)[-len(grid.shape) :]
    own = np.asarray(grid.spacing_mm)[-len(grid.shape) :]
    first = np.asarray(volume.origin_mm)[-len(grid.shape) :]
    at = np.asarray(grid.origin_mm)[-len(grid.shape) :]
    return bool(
        np.all(np.abs(own - step) < 1e-3 * step) and np.all(np.abs(at - first) < 0.1 * step)
    )


def _flat_box(mask: Mask, volume: Volume) -> tuple[slice, ...]:
    step, first = np.asarray(volume.spacing_mm[1:]), np.asarray(volume.origin_mm[1:])
    at = np.rint((np.asarray(mask.origin_mm[1:]) - first) / step).astype(int)
    return tuple(slice(int(a), int(a) + n) for a, n in zip(at, mask.inside.shape, strict=True))
