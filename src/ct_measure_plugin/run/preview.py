"""The small picture of the measured slice that a record carries for its report."""

from __future__ import annotations

import base64
import zlib
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.coverage import slices_of
from ct_measure_plugin.records import Preview

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["preview_of"]

#: Longest side of the picture, pixels: enough for a column of a page.
LONGEST_SIDE = 256


def preview_of(volume: Volume, regions: Sequence[Region]) -> Preview | None:
    """Return a picture of the slice that the first region lies on, or None if it lies on none.

    Every second, third, … pixel is taken; grey runs over the central 98 % of the finite values.
    """
    slices = slices_of(regions[0], volume) if regions else list(range(volume.shape[0]))
    if not slices:
        return None
    k = slices[len(slices) // 2]
    plane = volume.plane(k).astype(np.float32)
    step = max(1, -(-max(plane.shape) // LONGEST_SIDE))
    small = plane[::step, ::step]
    padding = volume.padding(k, small)
    usable = np.isfinite(small) if padding is None else np.isfinite(small) & ~padding
    if not usable.any():
        return None
    low, high = (float(v) for v in np.percentile(small[usable], [1, 99]))
    if high - low < 1:
        low, high = low - 0.5, high + 0.5
    grey = np.nan_to_num(np.clip((small - low) / (high - low), 0, 1)) * 255
    data = zlib.compress(np.rint(grey).astype(np.uint8).tobytes(), 9)
    _, dy, dx = volume.spacing_mm
    _, y, x = volume.origin_mm
    rows, columns = small.shape
    # the kept pixels stand for blocks of step × step around them
    return Preview(
        pixels=base64.b64encode(data).decode(),
        shape=(rows, columns),
        extent_mm=(
            y - dy * step / 2,
            y + dy * step * (rows - 0.5),
            x - dx * step / 2,
            x + dx * step * (columns - 0.5),
        ),
        z_mm=float(volume.positions_mm[k]),
        window_hu=(low, high),
    )
