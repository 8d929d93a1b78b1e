"""One region in two images: what differs, with the noise that they share allowed for."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.measurements.gather import gather
from ct_measure_plugin.physics.region_difference import region_difference
from ct_measure_plugin.physics.region_statistics import region_statistics
from ct_measure_plugin.physics.results import NotMeasured

if TYPE_CHECKING:
    from ct_measure_plugin.measurements.base import Settings
    from ct_measure_plugin.physics.region_difference import RegionDifference
    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["difference_between", "same_grid"]


def same_grid(first: Volume, second: Volume) -> bool:
    """Tell whether two volumes have the same voxels in the same places, to a thousandth of one."""
    if first.shape != second.shape:
        return False
    step = np.asarray(first.spacing_mm)
    shifts = (
        (np.asarray(second.spacing_mm) - step) * np.asarray(first.shape) / step,
        (np.asarray(second.origin_mm) - np.asarray(first.origin_mm)) / step,
        (second.positions_mm - first.positions_mm) / step[0],
    )
    return all(bool(np.all(np.abs(shift) < 1e-3)) for shift in shifts)


def difference_between(
    volumes: tuple[Volume, Volume],
    region: Region,
    answers: tuple[Any, Any],
    settings: Settings,
) -> RegionDifference | NotMeasured:
    """Return what differs between two volumes in a region: second minus first.

    Parameters
    ----------
    volumes : (Volume, Volume)
        The images; where they share a grid, the difference is taken pixel by pixel for the
        uncertainty of its mean.
    region : Region
        Where.
    answers : (RegionStatistics or NotMeasured, RegionStatistics or NotMeasured)
        What was found in either.
    settings : RegionStatisticsSettings
        With which it was found.

    Examples
    --------
    >>> from ct_measure_plugin.measurements import find, measure
    >>> from ct_measure_plugin.physics.regions import Disc
    >>> from ct_measure_plugin.physics.volume import Volume
    >>> hu = np.random.default_rng(1).integers(30, 50, (1, 40, 40))
    >>> pair = Volume(hu, (1, 1, 1)), Volume(hu + 5, (1, 1, 1))
    >>> disc = Disc((20, 20), 10, z_mm=0)
    >>> answers = tuple(measure("region_statistics", one, disc) for one in pair)
    >>> settings = find("region_statistics").settings_type()
    >>> str(difference_between(pair, disc, answers, settings).mean)  # whole numbers: ± 1/√12
    '5.00 ± 0.29 HU'
    """
    return region_difference(*answers, paired_error=_paired_error(volumes, region, settings))


def _paired_error(
    volumes: tuple[Volume, Volume], region: Region, settings: Settings
) -> float | None:
    """Return the standard error of the mean of the pixelwise difference; None without one grid."""
    if not same_grid(*volumes) or region.values is not None:
        return None
    first, second = (
        gather(one, region, rule=getattr(settings, "coverage", "area")) for one in volumes
    )
    if isinstance(first, NotMeasured) or isinstance(second, NotMeasured):
        return None
    if first.values.shape != second.values.shape or first.slices != second.slices:
        return None
    found = region_statistics(
        second.values - first.values,
        np.minimum(first.weights, second.weights),
        spacing_mm=first.spacing_mm,
    )
    return None if isinstance(found, NotMeasured) else found.mean.uncertainty
