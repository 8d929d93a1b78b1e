"""The numbers of a region while it moves: the same arithmetic, without the doubt."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.first_order import Sorted, moments, why_unusable
from ct_measure_plugin.physics.results import Caution, NotMeasured, Quantity, Result

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["RegionGlance", "region_glance"]

_PENDING = Caution(
    "no-uncertainty", "The region is moving; its uncertainties follow when it comes to rest."
)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RegionGlance(Result):
    """What can be told of a region thirty times a second.

    Attributes
    ----------
    mean, sd, n, area, volume, minimum, maximum, median, skewness, kurtosis : Quantity
        As in :class:`~ct_measure_plugin.physics.region_statistics.RegionStatistics`, equal to the
        last bit, none with an uncertainty.
    """

    mean: Quantity
    sd: Quantity
    n: Quantity
    area: Quantity | None = None
    volume: Quantity | None = None
    minimum: Quantity
    maximum: Quantity
    median: Quantity
    skewness: Quantity
    kurtosis: Quantity


def region_glance(
    values: Floats, weights: Floats, *, spacing_mm: tuple[float, ...], unit: str = "HU"
) -> RegionGlance | NotMeasured:
    """Return the numbers of a region without their uncertainties.

    Parameters
    ----------
    values, weights, spacing_mm, unit
        As for :func:`ct_measure_plugin.physics.region_statistics`, checked by the caller.

    Returns
    -------
    RegionGlance or NotMeasured
        NotMeasured as there.

    Examples
    --------
    >>> image = np.full((20, 20), 40.0); image[::2] = 42.0
    >>> found = region_glance(image, np.ones((20, 20)), spacing_mm=(0.5, 0.5))
    >>> found.mean, found.cautions[0].code
    (Quantity(value=41.0, unit='HU', uncertainty=None), 'no-uncertainty')
    """
    inside = weights > 0
    v, w = values[inside], weights[inside]
    finite = np.isfinite(v)
    if not finite.all():
        v, w = v[finite], w[finite]
    if why := why_unusable(v, len(finite) - v.size):
        return NotMeasured(*why)
    found = moments(v, w)
    order = Sorted(v, w)
    size = found.total * math.prod(spacing_mm)
    return RegionGlance(
        mean=Quantity(found.mean, unit),
        sd=Quantity(found.sample_sd, unit),
        n=Quantity(float(v.size), "px", 0.0),
        area=Quantity(size, "mm²", 0.0) if len(spacing_mm) == 2 else None,
        volume=Quantity(size, "mm³", 0.0) if len(spacing_mm) == 3 else None,
        minimum=Quantity(float(order.values[0]), unit),
        maximum=Quantity(float(order.values[-1]), unit),
        median=Quantity(float(order.quantile(0.5)), unit),
        skewness=Quantity(found.skewness, ""),
        kurtosis=Quantity(found.kurtosis, ""),
        cautions=(_PENDING,),
    )
