"""The slices that regions choose, and the pixels that lie in them."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.coverage import centres_inside, slices_of

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["chosen_slices", "pixels_inside"]


def chosen_slices(volume: Volume, regions: Sequence[Region]) -> list[int]:
    """Return the slices of any region, in order; all of them without a region."""
    if not regions:
        return list(range(volume.shape[0]))
    return sorted({k for region in regions for k in slices_of(region, volume)})


def pixels_inside(
    volume: Volume, regions: Sequence[Region], slices: Sequence[int]
) -> NDArray[np.bool_] | None:
    """Return the pixels of any region, by their centres, shape (ny, nx); None without a region.

    Of a mask that changes from slice to slice, those that it holds in all of them.
    """
    if not regions:
        return None
    shape = (volume.shape[1], volume.shape[2])
    found = np.zeros(shape, dtype=bool)
    for region in regions:
        own = np.full(shape, bool(slices))
        for k in slices if region.kind == "mask" else slices[:1]:
            cover = centres_inside(region, volume, k)
            here = np.zeros(shape, dtype=bool)
            here[cover.rows, cover.columns] = cover.weights > 0
            own &= here
        found |= own
    return found
