"""Where the voxels of a Labels layer lie in the Volume that is measured, or why it has no place."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.viewer.layer_frame import LayerFrame

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.physics.label_regions import Index
    from ct_measure_plugin.physics.regions import Mask
    from ct_measure_plugin.physics.volume import Volume
    from ct_measure_plugin.viewer.placement import Placement

__all__ = ["Grid", "NoGrid", "grid_of"]

#: Share of a step up to which axes that are not quite along the image's count as along them:
#: over 500 voxels this adds up to a tenth of one.
_ALONG = 2e-4

#: Slices of the map by which an image's slice may lie astray of its even place.
_ASTRAY = 0.25


@dataclass(frozen=True, slots=True)
class NoGrid:
    """A Labels layer whose voxels cannot be placed in the Volume, and why."""

    problem: str

    def same_as(self, other: Any) -> bool:
        """Tell whether another look came to the same."""
        return isinstance(other, NoGrid) and self.problem == other.problem


@dataclass(frozen=True, slots=True)
class Grid:
    """A Labels layer's voxels in the image frame.

    Attributes
    ----------
    spacing_mm, origin_mm : (float, float, float)
        dz, dy, dx, and z, y, x of the centre of the first voxel, after mirroring.
    z_mm : float or None
        The slice that a flat map is measured on; None for a deep one.
    mirrored : tuple of int
        Axes of the map that run against the image's.
    leading : tuple of int
        Fixed indices of the axes before z.
    shape : tuple of int
        Of the map without its leading axes.
    array : int
        Which array it is.
    """

    spacing_mm: tuple[float, float, float]
    origin_mm: tuple[float, float, float]
    z_mm: float | None
    mirrored: tuple[int, ...]
    leading: tuple[int, ...]
    shape: tuple[int, ...]
    array: int

    def same_as(self, other: Any) -> bool:
        """Tell whether the voxels lie where they lay; a flat map may be seen on another slice."""
        names = ("spacing_mm", "origin_mm", "mirrored", "leading", "shape", "array")
        return isinstance(other, Grid) and all(
            getattr(self, name) == getattr(other, name) for name in names
        )

    def data_of(self, layer: Any) -> Any:
        """Return the map itself, along the image's axes."""
        data = layer.data[0] if layer.multiscale else layer.data
        data = data[self.leading] if self.leading else data
        return np.flip(data, self.mirrored) if self.mirrored else data

    def inside(self, box: Index) -> Index | None:
        """Return a box of the layer as one of :meth:`data_of`, None if it lies elsewhere."""
        ahead, own = box[: len(self.leading)], box[len(self.leading) :]
        if not all(
            part.start <= k < part.stop for part, k in zip(ahead, self.leading, strict=True)
        ):
            return None
        return tuple(
            slice(n - part.stop, n - part.start) if axis in self.mirrored else part
            for axis, (part, n) in enumerate(zip(own, self.shape, strict=True))
        )

    def box_of(self, mask: Mask) -> Index:
        """Return the voxels that a mask made from this map covers."""
        step, origin = np.asarray(self.spacing_mm), np.asarray(self.origin_mm)
        first = np.rint((np.asarray(mask.origin_mm) - origin) / step).astype(int)
        first = first[-mask.inside.ndim :]
        return tuple(
            slice(int(a), int(a) + n) for a, n in zip(first, mask.inside.shape, strict=True)
        )


def grid_of(layer: Any, placement: Placement, point: Sequence[float]) -> Grid | NoGrid:
    """Return where a Labels layer's voxels lie in an image layer's Volume.

    Parameters
    ----------
    layer : napari.layers.Labels
        With its own scale and shift; its axes must run along the image's, either way.
    placement : Placement
        The image layer measured.
    point : sequence of float
        Where the viewer stands (``viewer.dims.point``).
    """
    data = layer.data[0] if layer.multiscale else layer.data
    depth = min(layer.ndim, 3)
    shape = tuple(int(n) for n in data.shape[-depth:])
    frame = LayerFrame(layer, placement, point)
    leading = _leading(layer, frame, layer.ndim - depth)
    zero = np.array([*leading, *[0.0] * depth])
    corner = frame.voxels(zero[None])[0]
    steps = frame.voxels(zero + np.eye(layer.ndim)[-depth:]) - corner  # (depth, 3)
    own = steps[:, -depth:]
    along = np.diag(own)
    off = np.abs(own - np.diag(along))
    if not np.all(along) or bool(np.any(off > _ALONG * np.abs(along)[:, None])):
        return NoGrid("its axes are turned against the image's; resample it onto the image")
    volume = placement.volume
    mirrored = tuple(int(axis) for axis in np.flatnonzero(along < 0))
    first = corner.copy()
    for axis in mirrored:
        first[3 - depth + axis] += along[axis] * (shape[axis] - 1)
    step = np.ones(3)
    step[-depth:] = np.abs(along)
    spacing = step * np.asarray(volume.spacing_mm)
    plane = np.asarray(volume.origin_mm[1:]) + first[1:] * np.asarray(volume.spacing_mm[1:])
    z, z_mm = float(volume.origin_mm[0]), None
    if depth == 3:
        z = float(volume.positions_mm[0] + first[0] * volume.spacing_mm[0])
        if not _slices_agree(first[0], step[0], shape[0], z, volume):
            return NoGrid("its slices are even and the image's are not; resample it")
    else:
        z_mm = float(volume.positions_mm[_shown(corner[0], volume)])
    return Grid(
        _triple(spacing), (z, float(plane[0]), float(plane[1])), z_mm,
        mirrored, leading, shape, id(layer.data),
    )  # fmt: skip


def _leading(layer: Any, frame: LayerFrame, count: int) -> tuple[int, ...]:
    if count <= 0:
        return ()
    stand = layer.world_to_data(frame.stand)[:count]
    return tuple(
        min(max(round(float(at)), 0), int(n) - 1)
        for at, n in zip(stand, layer.data.shape[:count], strict=True)
    )


def _slices_agree(first: float, step: float, count: int, z: float, volume: Volume) -> bool:
    """Tell whether even slices in mm meet the slices of the volume that they meet by number."""
    number = np.arange(volume.shape[0])
    by_number = (number - first) / step
    by_place = (volume.positions_mm - z) / (step * volume.spacing_mm[0])
    known = (by_number > -0.5) & (by_number < count - 0.5)
    return bool(np.all(np.abs(by_number - by_place)[known] <= _ASTRAY))


def _shown(k: float, volume: Volume) -> int:
    return min(max(round(float(k)), 0), volume.shape[0] - 1)


def _triple(values: NDArray[np.float64]) -> tuple[float, float, float]:
    z, y, x = (float(v) for v in values)
    return z, y, x
