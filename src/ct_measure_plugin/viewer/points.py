"""Points layers and regions: a point with a size is a disc of that diameter on its slice.

napari gives a point's size in the layer's own units. A point of size 0 has no area, and says so.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.errors import CtMeasureError
from ct_measure_plugin.physics.regions import Disc
from ct_measure_plugin.viewer.drawn import Drawn
from ct_measure_plugin.viewer.layer_frame import LayerFrame
from ct_measure_plugin.viewer.region_features import ELLIPSOID, Tags, tags_on
from ct_measure_plugin.viewer.shapes import NoRegionError, extent_of, swept

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume
    from ct_measure_plugin.viewer.placement import Placement

__all__ = ["points_on"]


def points_on(layer: Any, placement: Placement, point: Sequence[float]) -> tuple[Drawn, ...]:
    """Return every point of a layer as a disc in an image layer's Volume.

    Parameters
    ----------
    layer : napari.layers.Points
        Flat or deep.
    placement : Placement
        The image layer measured.
    point : sequence of float
        Where the viewer stands (``viewer.dims.point``).
    """
    if not len(layer.data):
        return ()
    frame = LayerFrame(layer, placement, point)
    centers = frame.planes(frame.voxels(layer.data))
    radii = np.asarray(layer.size, dtype=float) * frame.stretch / 2
    tags = tags_on(layer)
    return tuple(
        _drawn(i, centers[i], float(radii[i]), tags[i], placement.volume)
        for i in range(len(centers))
    )


def _drawn(
    index: int, center: NDArray[np.float64], radius: float, tags: Tags, volume: Volume
) -> Drawn:
    name = tags.name or f"point {index + 1}"
    region: Region | None = None
    problem = ""
    k = int(np.rint(center[0]))
    if not 0 <= k < volume.shape[0]:
        problem = "it lies above or below the volume"
    elif radius <= 0:
        problem = "a point of size 0 has no area; give it a size"
    else:
        z = extent_of(tags, float(volume.positions_mm[k]), volume)
        place = float(center[1]), float(center[2])
        try:
            region = Disc(place, radius, z_mm=z, name=name, **tags.words())
            region = swept(region, volume) if tags.swept == ELLIPSOID else region
        except (CtMeasureError, NoRegionError) as error:
            region, problem = None, str(error)
    return Drawn(index, name, region, problem, tags.group, tags.code)
