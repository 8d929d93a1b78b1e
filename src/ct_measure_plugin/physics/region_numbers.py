"""The numbers of a region with their uncertainties: one place for every formula of doubt.

With u the standard error of the mean, ν the independent samples as the variance sees them, n_e
those that would give u, s the SD and m_k the central moments:

- SD: s sqrt(2/ν + κ/n)/2, κ the excess kurtosis; skewness sqrt(6/ν), kurtosis sqrt(24/ν).
- A quantile q: half the distance between the quantiles q ± sqrt(q(1 - q)/n_e): one binomial
  standard deviation either side. The interquartile range adds both quartiles', correlated by 1/3.
- A mean absolute deviation: the SD of the absolute deviations over sqrt(ν).
- Root mean square: from the mean of x², whose variance is 4 m² u² + (m4 - m2²)/ν + 4 m m3/ν.
- A share p, and a bin of the histogram: with k = pν of ν samples, the SD of the posterior under a
  uniform prior, sqrt(p'(1 - p')/(ν + 3)) with p' = (k + 1)/(ν + 2), which is sqrt(p(1 - p)/ν) for
  many and not 0 for none. Entropy and uniformity: the SD of log2 p, and of 2p, over sqrt(ν).
- Values stored in steps add what :mod:`ct_measure_plugin.physics.quantisation` says, in quadrature.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.first_order import Histogram, Moments, Sorted, histogram, moments
from ct_measure_plugin.physics.quantisation import (
    rounding_of_mean,
    rounding_of_spread,
    single_value,
)
from ct_measure_plugin.physics.results import Curve, Quantity

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.noise_correlation import MeanDoubt

    Floats = NDArray[np.float64]

__all__ = ["Choices", "mean_and_sd", "numbers_of"]


@dataclass(frozen=True, slots=True)
class Choices:
    """What a user may choose; see :func:`ct_measure_plugin.physics.region_statistics`."""

    unit: str
    bin_width: float
    bin_edge: float
    percentiles: tuple[float, ...]
    ranges: tuple[tuple[float, float], ...]
    resolution: float = 0.0

    def __post_init__(self) -> None:
        if not all(0 <= p <= 100 for p in self.percentiles):
            raise ArgumentError("percentiles", "must lie within 0 to 100", self.percentiles)
        for low, high in self.ranges:
            if not low <= high:
                raise ArgumentError("ranges", "must be given as (low, high)", (low, high))
        if not (math.isfinite(self.resolution) and self.resolution >= 0):
            raise ArgumentError("resolution", "must be 0 or greater", self.resolution)


@dataclass(frozen=True, slots=True)
class _Samples:
    """How much is independent: doubt of the mean, samples of the variance and of the mean."""

    error: float
    nu: float
    effective: float
    pixels: float

    def of_share(self, share: Floats) -> Floats:
        """Return the doubt of shares."""
        middle = (share * self.nu + 1) / (self.nu + 2)
        found: Floats = np.sqrt(middle * (1 - middle) / (self.nu + 3))
        return found


def mean_and_sd(
    found: Moments, pixels: int, doubt: MeanDoubt, step: float
) -> tuple[float, float, float, float]:
    """Return the mean, its uncertainty, the sample SD and its uncertainty."""
    sd = found.sample_sd
    error = math.sqrt(doubt.variance_of_mean) if found.m2 else 0.0
    relative = _relative_doubt(found, pixels, doubt)
    return (
        found.mean,
        math.hypot(error, rounding_of_mean(sd, step)),
        sd,
        math.hypot(sd * relative, rounding_of_spread(sd, step)),
    )


def _relative_doubt(found: Moments, pixels: int, doubt: MeanDoubt) -> float:
    """Return the relative uncertainty of an SD."""
    nu = max(doubt.power_samples, 2.0)
    return math.sqrt(max(2.0 / nu + found.kurtosis / pixels, 0.0)) / 2


def numbers_of(v: Floats, w: Floats, doubt: MeanDoubt, choices: Choices) -> dict[str, Any]:
    """Return every Quantity and Curve of a region but those of its grid, by field name."""
    found = moments(v, w)
    unit, step = choices.unit, choices.resolution
    mean, error, sd, u_sd = mean_and_sd(found, v.size, doubt, step)
    standard = math.sqrt(doubt.variance_of_mean) if found.m2 else 0.0
    effective = (sd / standard) ** 2 if standard else float(v.size)
    samples = _Samples(error, max(doubt.power_samples, 2.0), effective, float(v.size))
    population = math.sqrt(found.m2)
    u_population = math.hypot(
        population * _relative_doubt(found, v.size, doubt), rounding_of_spread(population, step)
    )
    return {
        "mean": Quantity(mean, unit, error),
        "sd": Quantity(sd, unit, u_sd),
        "population_sd": Quantity(population, unit, u_population),
        "n": Quantity(float(v.size), "px", 0.0),
        "minimum": Quantity(float(v.min()), unit),
        "maximum": Quantity(float(v.max()), unit),
        "value_range": Quantity(float(np.ptp(v)), unit),
        "skewness": Quantity(found.skewness, "", math.sqrt(6.0 / samples.nu)),
        "kurtosis": Quantity(found.kurtosis, "", math.sqrt(24.0 / samples.nu)),
        "effective_n": Quantity(effective, "", effective * math.sqrt(2.0 / samples.nu)),
        **_order(Sorted(v, w), found, samples, choices),
        **_levels(found, u_population, samples, unit),
        **_histogram(v, w, samples, choices),
        **_shares(v, w, samples, choices),
    }


def _order(values: Sorted, found: Moments, samples: _Samples, choices: Choices) -> dict[str, Any]:
    """Return what rests on the order of the values."""
    unit = choices.unit
    extra = sorted(set(choices.percentiles))
    at = np.array([0.5, 0.1, 0.25, 0.75, 0.9, *(p / 100 for p in extra)])
    step = np.sqrt(at * (1 - at) / min(samples.effective, samples.pixels))
    value, low, high = values.quantile(np.stack([at, at - step, at + step]))
    rank = (high - low) / 2
    single = single_value(choices.resolution)
    doubt = np.hypot(rank, single)
    names = ("median", "p10", "p25", "p75", "p90")
    quantities: dict[str, Any] = {
        name: Quantity(float(value[i]), unit, float(doubt[i])) for i, name in enumerate(names)
    }
    (median, p10, p25, p75, p90), (_, _, u25, u75, _) = value[:5].tolist(), rank[:5].tolist()
    u_distance = math.sqrt(max(u25**2 + u75**2 - 2 / 3 * u25 * u75, 0.0) + 2 * single**2)
    mad, about_median = values.deviation(found.mean), values.deviation(median)
    square = found.m2 + (found.mean - median) ** 2
    robust, robust_spread, kept = values.robust_deviation(p10, p90)

    def deviation(mean: float, variance: float, share: float = 1.0) -> Quantity:
        error = math.sqrt(max(variance, 0.0) / (samples.nu * share))
        return Quantity(mean, unit, math.hypot(error, rounding_of_spread(mean, choices.resolution)))

    quantities["interquartile_range"] = Quantity(p75 - p25, unit, u_distance)
    quantities["mean_absolute_deviation"] = deviation(mad, found.m2 - mad**2)
    quantities["median_absolute_deviation"] = deviation(about_median, square - about_median**2)
    quantities["robust_mean_absolute_deviation"] = deviation(robust, robust_spread, kept)
    total = p75 + p25
    u_total = math.sqrt(u25**2 + u75**2 + 2 / 3 * u25 * u75 + 2 * single**2)
    if abs(total) > u_total:
        ratio = (p75 - p25) / total
        a, b = p75 * u25, p25 * u75
        rounding = single**2 * (p75**2 + p25**2)
        u_ratio = 2 * math.sqrt(max(a * a + b * b - 2 / 3 * a * b, 0.0) + rounding) / total**2
        quantities["quartile_coefficient_of_dispersion"] = Quantity(ratio, "", u_ratio)
    if extra:
        quantities["percentiles"] = Curve(
            np.array(extra), value[5:], doubt[5:], "percentile", "%", "value", unit
        )
    return quantities


def _levels(found: Moments, u_sd: float, samples: _Samples, unit: str) -> dict[str, Quantity]:
    """Return what depends on where the scale has its zero: energy, RMS, variation."""
    mean, u = found.mean, samples.error
    square = found.m2 + mean**2
    variance = 4 * mean**2 * u**2 + (found.m4 - found.m2**2 + 4 * mean * found.m3) / samples.nu
    root = math.sqrt(square)
    u_root = math.sqrt(max(variance, 0.0)) / (2 * root) if root else 0.0
    quantities = {
        "energy": Quantity(square * found.total, f"{unit}²" if unit else ""),
        "root_mean_square": Quantity(root, unit, u_root),
    }
    if abs(mean) > u:
        ratio = math.sqrt(found.m2) / mean
        u_ratio = math.hypot(u_sd / mean, ratio * u / mean)
        quantities["coefficient_of_variation"] = Quantity(ratio, "", u_ratio)
    return quantities


def _histogram(v: Floats, w: Floats, samples: _Samples, choices: Choices) -> dict[str, Any]:
    bins: Histogram = histogram(v, w, bin_width=choices.bin_width, bin_edge=choices.bin_edge)
    total = float(bins.counts.sum())
    share = bins.counts / total
    used = share[share > 0]
    information = float(np.sum(used * np.log2(used) ** 2)) - bins.entropy**2
    crowding = float(np.sum(used**3)) - bins.uniformity**2
    return {
        "mode": Quantity(bins.mode, choices.unit),
        "entropy": Quantity(bins.entropy, "bit", math.sqrt(max(information, 0.0) / samples.nu)),
        "uniformity": Quantity(bins.uniformity, "", 2 * math.sqrt(max(crowding, 0.0) / samples.nu)),
        "histogram": Curve(
            bins.centers,
            bins.counts,
            total * samples.of_share(share),
            "value",
            choices.unit,
            "pixels",
            "px",
        ),
    }


def _shares(v: Floats, w: Floats, samples: _Samples, choices: Choices) -> dict[str, Any]:
    if not choices.ranges:
        return {}
    total = float(w.sum())
    share = np.array(
        [float(np.sum(w[(v >= low) & (v <= high)])) / total for low, high in choices.ranges]
    )
    doubt = samples.of_share(share)
    return {
        "share": Quantity(100 * float(share[0]), "%", 100 * float(doubt[0])),
        "shares": Curve(
            np.arange(1.0, len(share) + 1),
            100 * share,
            100 * doubt,
            _named(choices),
            "",
            "share",
            "%",
        ),
    }


def _named(choices: Choices) -> str:
    """Say which range each number stands for."""
    unit = f" {choices.unit}".rstrip()
    words = [f"{i}: {low:g} to {high:g}{unit}" for i, (low, high) in enumerate(choices.ranges, 1)]
    return f"range, {', '.join(words)}"
