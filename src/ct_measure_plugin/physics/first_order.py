"""First-order statistics of weighted values, as plain numbers; no uncertainty, no unit.

Definitions follow the Image Biomarker Standardisation Initiative's reference manual
(arXiv:1612.07003), sections 3.3 (intensity-based statistics) and 3.4 (intensity histogram);
moments are population moments and a weight counts as that many pixels.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

__all__ = [
    "LARGEST",
    "SMALLEST",
    "Histogram",
    "Moments",
    "Sorted",
    "histogram",
    "moments",
    "weighted_quantile",
    "why_unusable",
]

#: Largest size of a value, and smallest difference of values, whose fourth powers are numbers.
LARGEST, SMALLEST = 1e30, 1e-60

#: A histogram with more bins than this is given without its empty bins.
MOST_BINS = 1 << 16


def why_unusable(values: Floats, lost: int = 0) -> tuple[str, str] | None:
    """Return why no statistics can be given of finite values, shape (n,), and the remedy.

    Parameters
    ----------
    values : ndarray, shape (n,)
        The pixels that are left.
    lost : int
        How many more hold no finite value.

    Examples
    --------
    >>> why_unusable(np.zeros(0), lost=5)[0]
    'none of the 5 pixels of the region holds a finite value'
    >>> why_unusable(np.array([1.0, 2.0]))
    """
    n = len(values)
    if n == 0 and lost:
        return (
            f"none of the {lost} pixels of the region holds a finite value",
            "measure where the image holds values, or look where these come from",
        )
    if n < 2:
        elsewhere = ", where more pixels hold a finite value" if lost else ""
        return (
            f"the region holds {n} usable pixel{'s' * (n != 1)}; at least 2 are needed",
            f"draw it larger{elsewhere}",
        )
    low, high = float(values.min()), float(values.max())
    size = max(abs(low), abs(high))
    if size > LARGEST or 0 < high - low < SMALLEST:
        what = f"values of {size:.2g}" if size > LARGEST else f"values only {high - low:.2g} apart"
        return (
            f"the region holds {what}, whose powers are beyond computer arithmetic",
            "look at the image's scale: CT numbers lie within some ten thousands",
        )
    return None


@dataclass(frozen=True, slots=True)
class Moments:
    """Mean, central moments and the sums of weights.

    Attributes
    ----------
    mean : float
    m2, m3, m4 : float
        Population central moments.
    total, squares : float
        Sum of the weights and of their squares.
    """

    mean: float
    m2: float
    m3: float
    m4: float
    total: float
    squares: float

    @property
    def sample_sd(self) -> float:
        """Sample SD: n - 1 for whole pixels, V1 - V2/V1 with weights."""
        return math.sqrt(self.m2 * self.total / (self.total - self.squares / self.total))

    @property
    def skewness(self) -> float:
        """m3/m2^1.5, 0 where all values are equal."""
        return self.m3 / self.m2**1.5 if self.m2 else 0.0

    @property
    def kurtosis(self) -> float:
        """m4/m2² - 3 (excess), 0 where all values are equal."""
        return self.m4 / self.m2**2 - 3.0 if self.m2 else 0.0


def moments(values: Floats, weights: Floats) -> Moments:
    """Return the moments of weighted values, shape (n,).

    >>> moments(np.array([1.0, 2.0, 3.0, 6.0]), np.ones(4)).m2
    3.5
    """
    total, squares = float(weights.sum()), float(np.sum(weights * weights))
    mean = float(np.sum(weights * values)) / total
    if np.ptp(values) == 0:  # equal values: rounding must not invent a spread
        return Moments(float(values[0]), 0.0, 0.0, 0.0, total, squares)
    residual = values - mean
    power = weights * residual * residual
    m2 = float(power.sum()) / total
    power *= residual
    m3 = float(power.sum()) / total
    m4 = float(np.sum(power * residual)) / total
    return Moments(mean, m2, m3, m4, total, squares)


def _sort_key(values: Floats) -> NDArray[Any]:
    """Return whole CT numbers as short integers, which sort in a fraction of the time."""
    if abs(float(values[0])) > 32767 or float(np.abs(values).max()) > 32767:
        return values
    short = values.astype(np.int16)
    return short if bool((short == values).all()) else values


class Sorted:
    """Values in order, so that any quantile is one interpolation."""

    def __init__(self, values: Floats, weights: Floats) -> None:
        order = np.argsort(_sort_key(values), kind="stable")
        self.values, self.weights = values[order], weights[order]
        middle = np.cumsum(self.weights) - self.weights / 2
        span = middle[-1] - middle[0]
        self._place = (middle - middle[0]) / span if len(values) > 1 else np.zeros(1)

    def quantile(self, at: ArrayLike) -> Floats:
        """Return quantiles (0 to 1), shape of `at`."""
        found: Floats = np.interp(
            np.clip(np.asarray(at, float), 0.0, 1.0), self._place, self.values
        )
        return found

    def deviation(self, center: float) -> float:
        """Return the mean absolute deviation about a value."""
        return float(np.sum(self.weights * np.abs(self.values - center)) / self.weights.sum())

    def robust_deviation(self, low: float, high: float) -> tuple[float, float, float]:
        """Return the mean absolute deviation of what lies within two values, both included.

        It is taken about that part's own mean; with it come the variance of the absolute deviations
        and the part's share of the weight.
        """
        first = int(np.searchsorted(self.values, low, "left"))
        last = int(np.searchsorted(self.values, high, "right"))
        v, w = self.values[first:last], self.weights[first:last]
        if not len(v):
            return 0.0, 0.0, 1.0
        total = float(w.sum())
        away = np.abs(v - float(np.sum(w * v)) / total)
        mean = float(np.sum(w * away)) / total
        spread = float(np.sum(w * (away - mean) ** 2)) / total
        return mean, spread, total / float(self.weights.sum())


def weighted_quantile(values: Floats, weights: Floats, at: ArrayLike) -> Floats:
    """Return quantiles of weighted values, shape of `at`.

    Interpolates linearly between the middles of the sorted weights; with equal weights this is
    numpy's default ("linear") method.

    >>> weighted_quantile(np.array([3.0, 1.0, 2.0]), np.ones(3), [0.25, 0.5])
    array([1.5, 2. ])
    """
    return Sorted(values, weights).quantile(at)


@dataclass(frozen=True, slots=True, eq=False)
class Histogram:
    """Weights by bin.

    Attributes
    ----------
    centers, counts : ndarray, shape (bins,)
        Middle of each bin, and the weight in it.
    entropy, uniformity : float
        -Σ p log2 p in bits, and Σ p².
    mode : float
        Middle of the fullest bin; among equals the one nearest to the mean.
    """

    centers: Floats
    counts: Floats
    entropy: float
    uniformity: float
    mode: float


def histogram(values: Floats, weights: Floats, *, bin_width: float, bin_edge: float) -> Histogram:
    """Return the histogram of weighted values with bins of a fixed width.

    Parameters
    ----------
    values, weights : ndarray, shape (n,)
    bin_width : float
        Width of the bins.
    bin_edge : float
        A value at which one bin ends and the next begins; the next includes it.

    Examples
    --------
    >>> found = histogram(np.array([1.0, 1, 2, 4]), np.ones(4), bin_width=1.0, bin_edge=-0.5)
    >>> found.mode, found.entropy, found.uniformity, found.counts
    (1.0, 1.5, 0.375, array([2., 1., 0., 1.]))
    """
    if not (math.isfinite(bin_width) and bin_width > 0):
        raise ArgumentError("bin_width", "must be greater than 0", bin_width)
    if not math.isfinite(bin_edge):
        raise ArgumentError("bin_edge", "must be finite", bin_edge)
    place = np.floor((values - bin_edge) / bin_width)
    first, bins = float(place.min()), float(place.max() - place.min()) + 1
    if bins <= MOST_BINS:
        counts = np.bincount((place - first).astype(np.intp), weights).astype(float)
        index = first + np.arange(len(counts))
    else:
        index, inverse = np.unique(place, return_inverse=True)
        counts = np.bincount(inverse, weights).astype(float)
    centers = np.asarray(bin_edge + (index + 0.5) * bin_width, dtype=float)
    share = counts[counts > 0] / counts.sum()
    full = np.flatnonzero(counts >= counts.max() * (1 - 1e-12))
    mean = float(np.sum(weights * values) / weights.sum())
    return Histogram(
        centers,
        counts,
        abs(float(-np.sum(share * np.log2(share)))),
        float(np.sum(share * share)),
        float(centers[full[np.argmin(np.abs(centers[full] - mean))]]),
    )
