"""The part of a region whose values lie in a range."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.coverage import centres_inside, slices_of
from ct_measure_plugin.physics.regions import Mask
from ct_measure_plugin.physics.results import NotMeasured

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["threshold_mask"]


def threshold_mask(
    volume: Volume, region: Region, low: float = -math.inf, high: float = math.inf
) -> Mask | NotMeasured:
    """Return the pixels of a region whose centre lies inside and whose value lies in a range.

    Parameters
    ----------
    volume : Volume
        Where the values are.
    region : Region
        Where to look; on one slice or several.
    low, high : float
        Lowest and highest value that counts, both included.

    Returns
    -------
    Mask or NotMeasured
        On the volume's own grid. NotMeasured if no pixel counts, or the slices are spaced
        unevenly, which a mask over several of them cannot hold.

    Raises
    ------
    ArgumentError
        If the range is upside down.

    Examples
    --------
    >>> from ct_measure_plugin.physics.regions import Box
    >>> from ct_measure_plugin.physics.volume import Volume
    >>> hu = np.arange(16).reshape(1, 4, 4)
    >>> found = threshold_mask(Volume(hu, (1, 1, 1)), Box((1.5, 1.5), (4, 2), z_mm=0), 5, 9)
    >>> found.inside.astype(int).tolist(), found.origin_mm
    ([[1, 1], [1, 0]], (0.0, 1.0, 1.0))
    """
    if not low <= high:
        raise ArgumentError("low, high", "must be given as (low, high)", (low, high))
    slices = slices_of(region, volume)
    if len(slices) > 1 and not _even(volume, slices):
        return NotMeasured(
            "a range of values over unevenly spaced slices cannot be held as a mask",
            "measure one slice at a time",
        )
    planes = {k: _plane(volume, region, k, low, high) for k in slices}
    used = [k for k in slices if planes[k].any()]
    if not used:
        return NotMeasured(
            f"no pixel of the region has a value from {low:g} to {high:g} {volume.unit}".rstrip(),
            "widen the range of values, or move the region",
        )
    deep = np.stack([planes[k] for k in range(used[0], used[-1] + 1)])
    rows, columns = (np.flatnonzero(deep.any(axis=axes)) for axes in ((0, 2), (0, 1)))
    inside = deep[:, rows[0] : rows[-1] + 1, columns[0] : columns[-1] + 1]
    _, dy, dx = volume.spacing_mm
    z = float(volume.positions_mm[used[0]])
    y, x = volume.origin_mm[1] + dy * float(rows[0]), volume.origin_mm[2] + dx * float(columns[0])
    mask = Mask(
        np.ascontiguousarray(inside), volume.spacing_mm, (z, y, x), name=_named(region, low, high)
    )
    return mask if len(used) > 1 else replace(mask, inside=mask.inside[0], z_mm=z)


def _plane(volume: Volume, region: Region, k: int, low: float, high: float) -> NDArray[np.bool_]:
    cover = centres_inside(region, volume, k)
    values = np.asarray(volume.hu[k, cover.rows, cover.columns])
    counts = (cover.weights > 0) & (values >= low) & (values <= high)
    padding = volume.padding(k, values)
    if padding is not None:
        counts &= ~padding
    found = np.zeros(volume.shape[1:], bool)
    found[cover.rows, cover.columns] = counts
    return found


def _even(volume: Volume, slices: list[int]) -> bool:
    positions = volume.positions_mm[slices]
    even = positions[0] + volume.spacing_mm[0] * np.arange(len(slices))
    return bool(np.all(np.abs(positions - even) < volume.spacing_mm[0] / 4))


def _named(region: Region, low: float, high: float) -> str:
    if math.isinf(low):
        words = f"up to {high:g}"
    elif math.isinf(high):
        words = f"from {low:g}"
    else:
        words = f"{low:g} to {high:g}"
    return f"{region.name} ({words})".strip()
