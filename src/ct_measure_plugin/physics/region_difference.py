"""What differs between two images in one region: second minus first, with its uncertainty."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

from ct_measure_plugin.physics.results import Caution, NotMeasured, Quantity, Result

if TYPE_CHECKING:
    from ct_measure_plugin.physics.region_glance import RegionGlance
    from ct_measure_plugin.physics.region_statistics import RegionStatistics

__all__ = ["RegionDifference", "region_difference"]

_NAMES = ("mean", "sd", "median", "minimum", "maximum")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RegionDifference(Result):
    """Second image minus first, in one region.

    Attributes
    ----------
    mean, sd, median, minimum, maximum : Quantity
        Difference of the two images' numbers of that name.
    """

    mean: Quantity
    sd: Quantity
    median: Quantity
    minimum: Quantity
    maximum: Quantity


def region_difference(
    first: RegionStatistics | RegionGlance | NotMeasured,
    second: RegionStatistics | RegionGlance | NotMeasured,
    *,
    paired_error: float | None = None,
) -> RegionDifference | NotMeasured:
    """Return what differs between two images in one region.

    Parameters
    ----------
    first, second : RegionStatistics, RegionGlance or NotMeasured
        The region's numbers in either image.
    paired_error : float, optional
        The standard error of the mean of the pixelwise difference, where the images share a grid.
        It allows for noise that they share, as two reconstructions of one scan do.

    Returns
    -------
    RegionDifference or NotMeasured
        NotMeasured if either was not measured, or they are in different units.

    Notes
    -----
    Uncertainties add in quadrature, u² = u₁² + u₂², which takes the images as independent; that of
    the mean is `paired_error` where it is given. Noise that both images share makes the true
    uncertainty of SD and median smaller than the one stated.

    Examples
    --------
    >>> import numpy as np
    >>> from ct_measure_plugin.physics.region_statistics import region_statistics
    >>> image = np.random.default_rng(1).normal(40, 10, (50, 50))
    >>> first = region_statistics(image, spacing_mm=(1, 1))
    >>> second = region_statistics(image + 3, spacing_mm=(1, 1))
    >>> found = region_difference(first, second, paired_error=0.0)
    >>> round(found.mean.value, 9), found.mean.uncertainty
    (3.0, 0.0)
    """
    for answer, word in ((first, "first"), (second, "second")):
        if isinstance(answer, NotMeasured):
            return NotMeasured(f"the {word} image: {answer.reason}", answer.remedy, answer.cautions)
    one, two = _numbers(first), _numbers(second)
    if one["mean"].unit != two["mean"].unit:
        units = " and ".join(repr(numbers["mean"].unit) for numbers in (one, two))
        return NotMeasured(f"the images are in different units, {units}", "convert one of them")
    found: dict[str, Any] = {name: _minus(two[name], one[name]) for name in _NAMES}
    if paired_error is not None and found["mean"].uncertainty is not None:
        found["mean"] = replace(found["mean"], uncertainty=paired_error)
    cautions = dict.fromkeys((*first.cautions, *second.cautions))
    what = "Noise that both images share was allowed for in the mean alone."
    if paired_error is None:
        what = "The noise of the two images was taken as independent."
    return RegionDifference(**found, cautions=(*cautions, Caution("independent-images", what)))


def _numbers(result: Any) -> dict[str, Quantity]:
    return {name: getattr(result, name) for name in _NAMES}


def _minus(two: Quantity, one: Quantity) -> Quantity:
    known = two.uncertainty is not None and one.uncertainty is not None
    doubt = math.hypot(two.uncertainty or 0.0, one.uncertainty or 0.0) if known else None
    return Quantity(two.value - one.value, two.unit, doubt)
