"""Bring a region into view: its slice, and its place on the canvas."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.physics.coverage import slices_of
from ct_measure_plugin.physics.regions import Mask, Region
from ct_measure_plugin.viewer.shapes import shape_of

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.viewer.placement import Placement

    Floats = NDArray[np.float64]

__all__ = ["bounds_of", "bring_into_view"]

#: Share of the canvas that a region may fill when it has to be made to fit.
_FILL = 0.6


def bounds_of(region: Region) -> Floats:
    """Return the lowest and the highest y, x of a region, mm; shape (2, 2).

    >>> from ct_measure_plugin.physics.regions import Disc
    >>> bounds_of(Disc((10.0, 20.0), 3.0)).tolist()
    [[7.0, 17.0], [13.0, 23.0]]
    """
    if isinstance(region, Mask):
        step, first = np.asarray(region.spacing_mm[1:]), np.asarray(region.origin_mm[1:])
        size = np.asarray(region.inside.shape[-2:])
        return np.stack([first - step / 2, first + step * (size - 0.5)])
    corners, _ = shape_of(region)
    return np.stack([corners.min(axis=0), corners.max(axis=0)])


def bring_into_view(viewer: Any, region: Region, placement: Placement, *, turn: bool = True) -> int:
    """Go to a slice of a region, and move the canvas if the region lies outside it.

    Parameters
    ----------
    viewer : ViewerModel
        What people look at.
    region : Region
        Where to go.
    placement : Placement
        The image layer whose frame the region is in.
    turn : bool
        Whether to turn to another slice; what lies on every slice needs none.

    Returns
    -------
    int
        The slice shown.
    """
    shown = placement.plane_of(_stand(viewer, placement))
    slices = slices_of(region, placement.volume)
    if turn and slices and shown not in slices and placement.layer.ndim > 2:
        shown = min(slices, key=lambda k: abs(k - shown))
        place = float(placement.volume.positions_mm[shown]), *placement.volume.origin_mm[1:]
        world = placement.world_of(place)
        viewer.dims.set_point(viewer.dims.ndim - 3, world[-3])
    if viewer.dims.ndisplay == 2:
        _move_canvas(viewer, bounds_of(region), placement, shown)
    return shown


def _stand(viewer: Any, placement: Placement) -> tuple[float, ...]:
    return tuple(viewer.dims.point)[-placement.layer.ndim :]


def _move_canvas(viewer: Any, bounds: Floats, placement: Placement, shown: int) -> None:
    z = float(placement.volume.positions_mm[shown])
    corners = [(bounds[i, 0], bounds[j, 1]) for i in (0, 1) for j in (0, 1)]
    worlds = np.array([placement.world_of((z, float(y), float(x))) for y, x in corners])
    axes = [axis - viewer.dims.ndim for axis in viewer.dims.displayed]
    if min(axes) < -worlds.shape[1]:
        return  # the canvas shows an axis that the image does not have
    low, high = worlds[:, axes].min(axis=0), worlds[:, axes].max(axis=0)
    camera = viewer.scene.camera
    size = np.asarray(viewer.canvas.viewbox_size(viewer.layers), dtype=float)
    half = size / (2 * camera.zoom)
    center = np.asarray(camera.center[-2:], dtype=float)
    if np.all(low >= center - half) and np.all(high <= center + half):
        return
    with np.errstate(divide="ignore"):
        fitting = float(np.min(_FILL * size / (high - low)))
    camera.zoom = min(camera.zoom, fitting)
    camera.center = (*camera.center[:-2], *((low + high) / 2).tolist())
