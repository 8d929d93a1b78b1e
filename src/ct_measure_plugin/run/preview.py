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

    from numpy.typing import NDArray

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["preview_of"]

#: Longest side of the picture, pixels: enough for a column of a page.
LONGEST_SIDE = 256


def preview_of(volume: Volume, regions: Sequence[Region]) -> Preview | None:
    """Return a picture of the slice that the first region lies on, or None if it lies on none.

    Every second, third, … pixel is taken. Grey runs over the header's first window, else over the
    central 98 % of the values denser than air.
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
    low, high = _window(volume, small[usable])
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


def _window(volume: Volume, values: NDArray[np.float32]) -> tuple[float, float]:
    if volume.windows:
        center, width = volume.windows[0].centre, volume.windows[0].width
        return center - width / 2, center + width / 2
    dense = values[values > -500]
    low, high = np.percentile(dense if dense.size > 100 else values, [1, 99])
    return (float(low), float(high)) if high - low >= 1 else (float(low) - 0.5, float(low) + 0.5)
