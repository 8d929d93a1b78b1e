"""The way between a layer of shapes or points and the voxels of the image that is measured.

Every layer has its own scale, shift and rotation, and may have fewer axes than the image. The way
leads through the viewer's world and is affine, so it is taken from one call an axis: napari turns
only one point at a time.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.viewer.placement import Placement

    Floats = NDArray[np.float64]

__all__ = ["LayerFrame"]


class LayerFrame:
    """Where a layer's points lie in an image's Volume, and the way back.

    Parameters
    ----------
    layer : napari.layers.Layer
        Of shapes or points; flat (it then lies on the slice shown) or deep.
    placement : Placement
        The image layer measured.
    point : sequence of float
        Where the viewer stands (``viewer.dims.point``).
    """

    def __init__(self, layer: Any, placement: Placement, point: Sequence[float]) -> None:
        self.layer = layer
        self.placement = placement
        self.stand = np.asarray(point, dtype=float)
        self._there = _affine(self._to_voxel, layer.ndim)
        self._back: tuple[Floats, Floats] | None = None

    @property
    def flat(self) -> bool:
        """True if the layer has no slice axis: what is on it lies on every slice."""
        return bool(self.layer.ndim < 3)

    def voxels(self, corners: Any) -> Floats:
        """Return points of the layer (n, axes) as voxel coordinates (n, 3), not rounded."""
        matrix, zero = self._there
        return np.asarray(np.asarray(corners, dtype=float) @ matrix.T + zero)

    def corners(self, voxels: Any) -> Floats:
        """Return voxel coordinates (n, 3) as points of the layer (n, axes)."""
        if self._back is None:
            self._back = _affine(self._from_voxel, 3)
        matrix, zero = self._back
        return np.asarray(np.asarray(voxels, dtype=float) @ matrix.T + zero)

    def planes(self, voxels: Any) -> Floats:
        """Return voxel coordinates (n, 3) as slice index and y, x in mm of the image frame."""
        found = np.array(voxels, dtype=float)
        found[:, 1:] = found[:, 1:] * self._step + self._origin
        return found

    def from_planes(self, planes: Any) -> Floats:
        """Return slice index and y, x in mm (n, 3) as points of the layer (n, axes)."""
        found = np.array(planes, dtype=float)
        found[:, 1:] = (found[:, 1:] - self._origin) / self._step
        return self.corners(found)

    @property
    def stretch(self) -> float:
        """How long one unit of the layer is in the image's plane, mm."""
        matrix, _ = self._there
        in_plane = matrix[1:, -2:] * self._step[:, None]
        return float(np.sqrt(abs(np.linalg.det(in_plane))))

    @property
    def _step(self) -> Floats:
        return np.asarray(self.placement.volume.spacing_mm[1:])

    @property
    def _origin(self) -> Floats:
        return np.asarray(self.placement.volume.origin_mm[1:])

    def _to_voxel(self, data: Floats) -> Floats:
        world = np.asarray(self.layer.data_to_world(data), dtype=float)
        ahead = self.stand[: max(0, len(self.stand) - len(world))]
        full = np.concatenate([ahead, world])
        return np.asarray(self.placement.index_of(tuple(full[-self.placement.layer.ndim :])))

    def _from_voxel(self, voxel: Floats) -> Floats:
        deep = self.placement.layer.ndim > 2
        inside = (*self.placement.leading, *voxel) if deep else voxel[1:]
        world = np.asarray(self.placement.layer.data_to_world(inside), dtype=float)
        ahead = self.stand[: max(0, len(self.stand) - len(world))]
        full = np.concatenate([ahead, world])
        return np.asarray(self.layer.world_to_data(full[-self.layer.ndim :]), dtype=float)


def _affine(way: Callable[[Floats], Floats], axes: int) -> tuple[Floats, Floats]:
    """Return the matrix and the shift of an affine way, from one call an axis."""
    zero = way(np.zeros(axes))
    unit = np.eye(axes)
    return np.stack([way(unit[i]) - zero for i in range(axes)], axis=1), zero
