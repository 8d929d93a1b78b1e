"""An object beside its background: difference, contrast, CNR and SNR, each with its definition."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal, TypeAlias, get_args

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.results import NotMeasured, Quantity, Result

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.region_statistics import RegionStatistics

__all__ = ["Noise", "RegionContrast", "region_contrast"]

#: Which spread the CNR divides by.
Noise: TypeAlias = Literal["background", "mean", "sum"]

#: The HU of nothing: CT numbers plus this are proportional to attenuation.
AIR_HU = 1000.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RegionContrast(Result):
    """An object beside its background.

    Attributes
    ----------
    difference : Quantity
        Mean of the object minus mean of the background.
    contrast : Quantity or None
        The difference over the background's attenuation, 100 Δ/(m_b + 1000); only for HU.
    cnr : Quantity
        abs(Δ) over the noise of the definition chosen.
    detail_snr : Quantity or None
        abs(Δ) over the standard error of the object's mean: how far the object stands out of the
        noise as a whole. None if the object has no noise.
    snr : Quantity or None
        Mean of the object over its SD. None if the object has no noise.
    attenuation_snr : Quantity or None
        (mean + 1000)/SD of the object, which has a meaning near 0 HU; only for HU.
    object_mean, object_sd, background_mean, background_sd : Quantity
        What they are made of; of several backgrounds the mean, and the root mean square SD.
    noise : Quantity
        The spread by which the CNR divides.
    """

    difference: Quantity
    contrast: Quantity | None = None
    cnr: Quantity
    detail_snr: Quantity | None = None
    snr: Quantity | None = None
    attenuation_snr: Quantity | None = None
    object_mean: Quantity
    object_sd: Quantity
    background_mean: Quantity
    background_sd: Quantity
    noise: Quantity


def region_contrast(
    found: RegionStatistics,
    backgrounds: Sequence[RegionStatistics],
    *,
    noise: Noise = "background",
) -> RegionContrast | NotMeasured:
    """Return how an object stands out of its background.

    Parameters
    ----------
    found : RegionStatistics
        The object.
    backgrounds : sequence of RegionStatistics
        One background or several; several count alike, whatever their sizes.
    noise : {"background", "mean", "sum"}
        The CNR divides by the background's SD; by sqrt((SD_o² + SD_b²)/2); or by
        sqrt(SD_o² + SD_b²).

    Returns
    -------
    RegionContrast or NotMeasured
        NotMeasured if that noise is 0.

    Raises
    ------
    ArgumentError
        If there is no background, or the noise is none of the three.

    Notes
    -----
    The means' uncertainties hold the noise's correlation within each region; between regions it is
    taken as 0. The mean of k backgrounds has the larger of what their standard errors give, and of
    the scatter of their means over sqrt(k): a background that is not flat counts as doubt. A
    quotient a/b has the variance (u_a/b)² + (a u_b/b²)². [1]_

    Examples
    --------
    >>> from ct_measure_plugin.physics import region_statistics
    >>> rng = np.random.default_rng(1)
    >>> rod, water = (
    ...     region_statistics(rng.normal(level, 10, (40, 40)), spacing_mm=(0.5, 0.5))
    ...     for level in (60, 0)
    ... )
    >>> answer = region_contrast(rod, [water])
    >>> bool(abs(answer.difference.value - 60) < 2), bool(abs(answer.cnr.value - 6) < 0.5)
    (True, True)

    References
    ----------
    .. [1] JCGM 100:2008, 5.1.2.
    """
    if noise not in get_args(Noise):
        raise ArgumentError("noise", "must be 'background', 'mean' or 'sum'", noise)
    if not backgrounds:
        raise ArgumentError("backgrounds", "must hold at least one", 0)
    unit = found.mean.unit
    mean, sd = _pooled([b.mean for b in backgrounds]), _spread([b.sd for b in backgrounds])
    size = found.mean.value - mean.value
    u = math.hypot(found.mean.uncertainty or 0.0, mean.uncertainty or 0.0)
    divisor = _noise(found.sd, sd, noise)
    cnr = _ratio(abs(size), u, divisor)
    if cnr is None:
        return NotMeasured(
            "there is no noise to compare the difference with: the SD is 0 within its uncertainty",
            "measure an image with noise, or read the difference of the means",
        )
    return RegionContrast(
        difference=Quantity(size, unit, u),
        contrast=_ratio(100 * size, 100 * u, _raised(mean), "%") if unit == "HU" else None,
        cnr=cnr,
        detail_snr=_detail(size, u, found),
        snr=_ratio(found.mean.value, found.mean.uncertainty or 0.0, found.sd),
        attenuation_snr=_attenuation(found),
        object_mean=found.mean,
        object_sd=found.sd,
        background_mean=mean,
        background_sd=sd,
        noise=divisor,
    )


def _pooled(means: list[Quantity]) -> Quantity:
    """Return the mean of means."""
    values = np.array([mean.value for mean in means])
    errors = np.array([mean.uncertainty or 0.0 for mean in means])
    count = len(values)
    u = math.sqrt(float(np.sum(errors**2))) / count
    if count > 1:
        u = max(u, float(values.std(ddof=1)) / math.sqrt(count))
    return Quantity(float(values.mean()), means[0].unit, u)


def _spread(sds: list[Quantity]) -> Quantity:
    """Return the root mean square of SDs."""
    values = np.array([sd.value for sd in sds])
    errors = np.array([sd.uncertainty or 0.0 for sd in sds])
    root = math.sqrt(float(np.mean(values**2)))
    if root == 0:
        return Quantity(0.0, sds[0].unit, float(np.max(errors)))
    u = math.sqrt(float(np.sum((values * errors) ** 2))) / (len(values) * root)
    return Quantity(root, sds[0].unit, u)


def _noise(one: Quantity, other: Quantity, definition: Noise) -> Quantity:
    if definition == "background":
        return other
    both = _spread([one, other])
    factor = math.sqrt(2.0) if definition == "sum" else 1.0
    return Quantity(factor * both.value, both.unit, factor * (both.uncertainty or 0.0))


def _raised(mean: Quantity) -> Quantity:
    return Quantity(mean.value + AIR_HU, mean.unit, mean.uncertainty)


def _ratio(value: float, u: float, divisor: Quantity, unit: str = "") -> Quantity | None:
    """Return a quotient, None where its divisor is within its uncertainty of 0."""
    below, doubt = divisor.value, divisor.uncertainty or 0.0
    if below == 0 or abs(below) <= doubt:
        return None
    return Quantity(value / below, unit, math.hypot(u / below, value * doubt / below**2))


def _detail(size: float, u: float, found: RegionStatistics) -> Quantity | None:
    error = found.mean.uncertainty or 0.0
    if not error or not found.sd.value:
        return None
    count = found.effective_n
    # the effective n goes as the inverse square of the standard error
    relative = (count.uncertainty or 0.0) / count.value / 2
    return _ratio(abs(size), u, Quantity(error, found.mean.unit, error * relative))


def _attenuation(found: RegionStatistics) -> Quantity | None:
    if found.mean.unit != "HU":
        return None
    return _ratio(found.mean.value + AIR_HU, found.mean.uncertainty or 0.0, found.sd)
