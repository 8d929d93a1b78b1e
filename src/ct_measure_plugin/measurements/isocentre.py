"""Where the isocentre lies in a Volume's image frame."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["isocentre"]


def isocentre(
    volume: Volume, given: tuple[float, float] | None = None, slice_index: int = 0
) -> tuple[float, float]:
    """Return the y and x of the isocentre, mm in the image frame.

    What is given wins; then what the header of the slice says; then the middle of the image, where
    the isocentre lies unless the reconstruction was shifted.

    >>> from ct_measure_plugin.physics.volume import Volume
    >>> isocentre(Volume(np.zeros((3, 5, 9)), (1.0, 0.5, 0.5)))
    (1.0, 2.0)
    """
    if given is not None:
        return given
    facts = volume.acquisition[slice_index] if slice_index < len(volume.acquisition) else None
    if facts is not None and facts.isocentre_mm is not None and volume.direction_lps is not None:
        place = volume.direction_lps @ np.asarray(facts.isocentre_mm, dtype=float)
        return float(place[1]), float(place[2])
    _, ny, nx = volume.shape
    _, dy, dx = volume.spacing_mm
    return volume.origin_mm[1] + (ny - 1) / 2 * dy, volume.origin_mm[2] + (nx - 1) / 2 * dx
