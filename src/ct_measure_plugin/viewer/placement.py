"""Where a layer's Volume lies in the viewer's world, and the way between the two."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Sequence

    from napari.layers import Image

    from ct_measure_plugin.physics.volume import Volume

__all__ = ["Placement"]


@dataclass(frozen=True, slots=True, eq=False)
class Placement:
    """Where a layer's Volume lies in the viewer's world.

    Attributes
    ----------
    volume : Volume
        What to measure on.
    layer : Image
        The layer it came from.
    leading : tuple of int
        Fixed indices of the axes before z, for layers of more than three.
    data : array
        The layer's data when this was made.
    """

    volume: Volume
    layer: Image
    leading: tuple[int, ...] = ()
    data: Any = None

    def still_holds(self, other: Placement) -> bool:
        """Tell whether a newer placement of the layer says the same about the same data."""
        if self.data is not other.data or self.leading != other.leading:
            return False
        one, two = self.volume, other.volume
        return one is two or all(
            getattr(one, name) == getattr(two, name)
            for name in ("spacing_mm", "origin_mm", "tilt_deg", "unit", "cautions", "source")
        )

    def index_of(self, world: Sequence[float]) -> tuple[float, float, float]:
        """Return the voxel coordinates (slice, row, column) of a world point, not rounded."""
        data = [float(v) for v in self.layer.world_to_data(world)]
        z, y, x = data[-3:] if self.layer.ndim > 2 else (0.0, *data[-2:])
        return z, y, x

    def plane_of(self, world: Sequence[float]) -> int:
        """Return the slice that the viewer shows when it stands at a world point."""
        nearest = round(self.index_of(world)[0])  # half to even, as napari rounds
        return min(max(nearest, 0), self.volume.shape[0] - 1)

    def frame_of(self, world: Sequence[float]) -> tuple[float, float, float]:
        """Return the place (z, y, x) of a world point in the Volume's image frame, mm."""
        k, row, column = self.index_of(world)
        _, dy, dx = self.volume.spacing_mm
        _, y, x = self.volume.origin_mm
        return _z_at(self.volume, k), y + row * dy, x + column * dx

    def world_of(self, frame_mm: Sequence[float]) -> tuple[float, ...]:
        """Return the world point, one number an axis of the layer, of a place (z, y, x) in mm."""
        z, y, x = frame_mm
        _, dy, dx = self.volume.spacing_mm
        _, y_0, x_0 = self.volume.origin_mm
        inside = (_index_at(self.volume, z), (y - y_0) / dy, (x - x_0) / dx)
        data = (*self.leading, *inside) if self.layer.ndim > 2 else inside[1:]
        return tuple(float(v) for v in self.layer.data_to_world(data))


def _z_at(volume: Volume, k: float) -> float:
    """Return the z of a fractional slice index, going on evenly beyond the ends."""
    positions, dz = volume.positions_mm, volume.spacing_mm[0]
    last = len(positions) - 1
    if k < 0:
        return float(positions[0] + k * dz)
    if k > last:
        return float(positions[last] + (k - last) * dz)
    return float(np.interp(k, np.arange(last + 1), positions))


def _index_at(volume: Volume, z_mm: float) -> float:
    """Return the fractional slice index of a z; the way back from :func:`_z_at`."""
    positions, dz = volume.positions_mm, volume.spacing_mm[0]
    last = len(positions) - 1
    if z_mm < positions[0]:
        return float((z_mm - positions[0]) / dz)
    if z_mm > positions[last]:
        return float(last + (z_mm - positions[last]) / dz)
    return float(np.interp(z_mm, positions, np.arange(last + 1)))
