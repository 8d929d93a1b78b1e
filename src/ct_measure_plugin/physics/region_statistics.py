"""First-order statistics of the pixels in a region, each with its uncertainty."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import partial
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.first_order import moments, weighted_quantile, why_unusable
from ct_measure_plugin.physics.noise_correlation import MeanDoubt, doubt_of_mean, independent_doubt
from ct_measure_plugin.physics.quantisation import resolution_of
from ct_measure_plugin.physics.region_numbers import Choices, mean_and_sd, numbers_of
from ct_measure_plugin.physics.results import Caution, Curve, NotMeasured, Quantity, Result
from ct_measure_plugin.physics.slice_spectrum import SliceSpectrum
from ct_measure_plugin.physics.spectrum_doubt import doubt_from_spectrum, misfit, unfit

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import ArrayLike, NDArray

    from ct_measure_plugin.physics.noise_power import NoisePower

    Floats = NDArray[np.float64]

__all__ = ["RegionStatistics", "region_statistics", "weighted_quantile"]

#: Below this many pixels a spread says little; the number is a rule of thumb (common practice).
FEW_PIXELS = 50

#: Below this many independent samples the standard error may cover less than it says: under 93 % on
#: noise smoother than the priors expect (the docs page has the figures).
FEW_SAMPLES = 10.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RegionStatistics(Result):
    """Statistics of one region.

    Attributes
    ----------
    mean : Quantity
        Weighted mean; its uncertainty is the standard error of the mean, with the noise
        correlation of the region itself allowed for.
    sd, population_sd : Quantity
        Sample standard deviation (n - 1; with weights V1 - V2/V1), and the population one (n).
    n : Quantity
        Pixels (voxels) of which any part lies inside.
    area, volume : Quantity or None
        Area of a region on one slice in mm², volume of one on several slices in mm³.
    minimum, maximum, value_range : Quantity
        Of the pixels inside.
    median, p10, p25, p75, p90, interquartile_range : Quantity
        Quantiles and the distance of the quartiles.
    skewness, kurtosis : Quantity
        m3/m2^1.5 and m4/m2² - 3 with population moments; 0 where all values are equal.
    mean_absolute_deviation, median_absolute_deviation : Quantity
        Mean of abs(x - mean) and mean of abs(x - median).
    robust_mean_absolute_deviation : Quantity
        Mean of abs(x - mean) of the values from P10 to P90, about their own mean.
    coefficient_of_variation, quartile_coefficient_of_dispersion : Quantity or None
        population SD / mean, and (P75 - P25)/(P75 + P25); None where the denominator is within
        its uncertainty of 0. Both depend on where the scale has its zero.
    energy, root_mean_square : Quantity
        Σ x², and the root of its mean.
    mode, entropy, uniformity : Quantity
        Of the histogram: its fullest bin, -Σ p log2 p in bits, Σ p².
    share : Quantity or None
        Share of the pixels in the first range of values asked for, in percent.
    effective_n : Quantity
        Independent samples that would give the same standard error of the mean.
    histogram : Curve
        Pixels by value.
    percentiles, shares : Curve or None
        The percentiles asked for; the share in each range asked for, by its number from 1.
    slice_mean, slice_sd : Curve or None
        Mean and sample SD of each slice against z.
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
    population_sd: Quantity
    p10: Quantity
    p25: Quantity
    p75: Quantity
    p90: Quantity
    interquartile_range: Quantity
    value_range: Quantity
    mean_absolute_deviation: Quantity
    robust_mean_absolute_deviation: Quantity
    median_absolute_deviation: Quantity
    coefficient_of_variation: Quantity | None = None
    quartile_coefficient_of_dispersion: Quantity | None = None
    energy: Quantity
    root_mean_square: Quantity
    mode: Quantity
    entropy: Quantity
    uniformity: Quantity
    share: Quantity | None = None
    effective_n: Quantity
    histogram: Curve
    percentiles: Curve | None = None
    shares: Curve | None = None
    slice_mean: Curve | None = None
    slice_sd: Curve | None = None

    @property
    def standard_error(self) -> Quantity:
        """The standard error of the mean as a number of its own."""
        return Quantity(self.mean.uncertainty or 0.0, self.mean.unit)


def region_statistics(  # noqa: PLR0913 - choices, each with its default and given by name
    values: ArrayLike,
    weights: ArrayLike | None = None,
    *,
    spacing_mm: tuple[float, ...],
    unit: str = "HU",
    bin_width: float = 5.0,
    bin_edge: float = -0.5,
    percentiles: tuple[float, ...] = (),
    ranges: tuple[tuple[float, float], ...] = (),
    positions_mm: ArrayLike | None = None,
    resolution: float | None = None,
    noise: NoisePower | SliceSpectrum | None = None,
) -> RegionStatistics | NotMeasured:
    """Return mean, spread, extremes and shape of the values in a region.

    Parameters
    ----------
    values : array, shape (n,), (ny, nx) or (nz, ny, nx)
        CT numbers. On a grid the correlation of the noise is estimated and enters the standard
        error; a flat list is taken as independent samples, and a Caution says so.
    weights : array of the same shape, optional
        Coverage of each pixel, 0 to 1; 0 leaves it out. Default 1 everywhere.
    spacing_mm : tuple of float
        Step along each axis of the grid, (dy, dx) or (dz, dy, dx); for a flat list, of one pixel.
    unit : str
        Unit of the values.
    bin_width, bin_edge : float
        Bins of the histogram, and with it of mode, entropy and uniformity. The default edge of
        -0.5 puts whole numbers in the middle of bins of odd width.
    percentiles : tuple of float
        Further percentiles, 0 to 100.
    ranges : tuple of (float, float)
        Ranges of values, both ends included, whose share is wanted.
    positions_mm : array, shape (nz,), optional
        z of each slice; given, the result holds the curves along z.
    resolution : float, optional
        Step in which the values are stored, 0 for values that were not rounded. Default 1 if all
        are whole numbers, else 0.
    noise : NoisePower or SliceSpectrum, optional
        A spectrum measured in the same material and place; the standard error of the mean is then
        from it, and not from the region's own pixels.

    Returns
    -------
    RegionStatistics or NotMeasured
        NotMeasured if fewer than two pixels with a finite value have weight, or the values'
        powers are beyond computer arithmetic.

    Raises
    ------
    ArgumentError
        If the weights do not fit the values or lie outside 0 to 1, or a choice is out of range.

    Notes
    -----
    Moments are population moments (divide by the sum of weights); `sd` is the sample standard
    deviation. Quantiles interpolate linearly, as numpy's default does, and with weights between
    the middles of the weights. The uncertainties are given in
    :mod:`ct_measure_plugin.physics.region_numbers`. [1]_ [2]_

    Examples
    --------
    >>> image = np.full((20, 20), 40.0); image[::2] = 42.0
    >>> found = region_statistics(image, spacing_mm=(0.5, 0.5))
    >>> found.mean.value, found.n.value, str(found.area)
    (41.0, 400.0, '100 mm²')

    References
    ----------
    .. [1] Image Biomarker Standardisation Initiative, reference manual (arXiv:1612.07003),
       sections 3.3 and 3.4.
    .. [2] JCGM 100:2008, 4.2: standard uncertainty of a mean.
    """
    data, cover = _checked(values, weights)
    steps = tuple(float(step) for step in spacing_mm)
    if not steps or not all(math.isfinite(s) and s > 0 for s in steps):
        raise ArgumentError("spacing_mm", "must hold lengths greater than 0", spacing_mm)
    inside = int(np.count_nonzero(cover))
    data, cover, cautions = _finite(data, cover)
    v, w = data[cover > 0], cover[cover > 0]
    if why := why_unusable(v, inside - v.size):
        return NotMeasured(*why, tuple(cautions))
    step = resolution_of(v) if resolution is None else float(resolution)
    choices = Choices(unit, bin_width, bin_edge, tuple(percentiles), tuple(ranges), step)
    spectrum, unusable = _spectrum(noise, steps if data.ndim > 1 else (), unit)
    cautions += unusable
    judge = doubt_of_mean if spectrum is None else partial(doubt_from_spectrum, noise=spectrum)
    if data.ndim > 1 and len(steps) == data.ndim:
        doubt = judge(data, cover, steps)
    else:
        doubt = independent_doubt(v, w)
        cautions.append(
            Caution("independence-assumed", "The pixels were taken as independent samples.")
        )
    cautions += _sample_cautions(v.size, doubt, known=spectrum is not None)
    size = float(w.sum()) * math.prod(steps)
    numbers = numbers_of(v, w, doubt, choices)
    if spectrum is not None and (other := misfit(spectrum, numbers["sd"])) is not None:
        cautions.append(other)
    return RegionStatistics(
        **numbers,
        **_along_z(data, cover, steps, positions_mm, choices, judge),
        area=Quantity(size, "mm²", 0.0) if len(steps) == 2 else None,
        volume=Quantity(size, "mm³", 0.0) if len(steps) == 3 else None,
        cautions=(
            *cautions,
            Caution(
                "no-uncertainty",
                "Minimum, maximum, range, mode and energy describe these pixels only; no"
                " uncertainty is stated.",
            ),
        ),
    )


def _checked(values: ArrayLike, weights: ArrayLike | None) -> tuple[Floats, Floats]:
    data = np.asarray(values, dtype=float)
    if data.ndim not in (1, 2, 3) or data.size == 0:
        raise ArgumentError("values", "must hold pixels in 1 to 3 dimensions", data.shape)
    cover = np.ones(data.shape) if weights is None else np.asarray(weights, dtype=float)
    if cover.shape != data.shape:
        raise ArgumentError("weights", f"must have the values' shape {data.shape}", cover.shape)
    if not bool(np.all((cover >= 0) & (cover <= 1 + 1e-12))):
        raise ArgumentError("weights", "must lie within 0 to 1", [cover.min(), cover.max()])
    return data, cover


def _finite(data: Floats, cover: Floats) -> tuple[Floats, Floats, list[Caution]]:
    """Leave out what is not finite, and say how many."""
    finite = np.isfinite(data)
    lost = int(np.count_nonzero((cover > 0) & ~finite))
    if not lost:
        return data, cover, []
    caution = Caution(
        "not-finite",
        f"{lost} pixels of the region hold no finite value and were left out.",
        "Look where they come from.",
    )
    return np.where(finite, data, 0.0), np.where(finite, cover, 0.0), [caution]


def _spectrum(
    noise: NoisePower | SliceSpectrum | None, steps: tuple[float, ...], unit: str
) -> tuple[SliceSpectrum | None, list[Caution]]:
    """Return a spectrum that fits the pixels, or none and why."""
    if noise is None:
        return None, []
    found = SliceSpectrum.of(noise)
    why = unfit(found, steps, unit)
    return (found, []) if why is None else (None, [why])


def _sample_cautions(n: int, doubt: MeanDoubt, *, known: bool) -> list[Caution]:
    found = []
    if n < FEW_PIXELS:
        found.append(
            Caution(
                "few-pixels",
                f"The region holds {n} pixels; a spread is safe to quote from {FEW_PIXELS}.",
                "Draw the region larger or use more slices.",
            )
        )
    if known:
        found.append(
            Caution(
                "spectrum-used",
                "The standard error of the mean is from a noise power spectrum measured elsewhere.",
            )
        )
    elif doubt.reach > 0:
        found.append(
            Caution(
                "correlated-noise",
                f"The noise is correlated over {doubt.reach:.2g} mm; the standard error allows"
                " for it.",
            )
        )
        if doubt.power_samples < FEW_SAMPLES:
            found.append(
                Caution(
                    "few-independent-samples",
                    f"The region holds about {doubt.power_samples:.0f} independent noise samples;"
                    " its standard error is itself uncertain.",
                    "Draw the region larger or use more slices.",
                )
            )
    return found


def _along_z(
    data: Floats,
    cover: Floats,
    steps: tuple[float, ...],
    positions: ArrayLike | None,
    choices: Choices,
    judge: Callable[[Floats, Floats, tuple[float, ...]], MeanDoubt],
) -> dict[str, Any]:
    """Return the curves of a region on several slices."""
    if positions is None or data.ndim != 3 or len(steps) != 3:
        return {}
    z = np.asarray(positions, float)
    if z.shape != (len(data),):
        raise ArgumentError("positions_mm", f"must hold {len(data)} positions", z.shape)
    rows = []
    for k, (plane, own) in enumerate(zip(data, cover, strict=True)):
        inside = own > 0
        if np.count_nonzero(inside) < 2:
            continue
        doubt = judge(plane, own, steps[1:])
        found = moments(plane[inside], own[inside])
        pixels = int(np.count_nonzero(inside))
        rows.append((z[k], *mean_and_sd(found, pixels, doubt, choices.resolution)))
    if not rows:
        return {}
    at, mean_z, error_z, sd_z, sd_error_z = np.array(rows).T
    return {
        "slice_mean": Curve(at, mean_z, error_z, "z", "mm", "mean", choices.unit),
        "slice_sd": Curve(at, sd_z, sd_error_z, "z", "mm", "SD", choices.unit),
    }
