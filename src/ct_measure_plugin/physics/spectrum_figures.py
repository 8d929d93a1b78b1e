"""Peak, mean and half-power frequencies of a radial noise power spectrum."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.results import Quantity
from ct_measure_plugin.physics.spectrum_low import continued

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]
    Flags = NDArray[np.bool_]

__all__ = ["SpectrumFigures", "mean_frequency", "peak_frequency", "spectrum_figures"]

#: The peak's polynomial is fitted where the curve exceeds this share of its largest value.
PEAK_SHARE = 0.7

#: Curves drawn to carry the bins' uncertainty through; they fix a standard deviation to 6 %.
DRAWS = 150
SEED = 20


@dataclass(frozen=True, slots=True)
class SpectrumFigures:
    """Figures of one curve, in mm⁻¹.

    Attributes
    ----------
    peak, mean : Quantity
        Where the curve is largest; its centre of mass.
    half_low, half_high : Quantity or None
        Where it falls to half its peak below and above it; None where it does not.
    at_end : bool
        True if the curve is largest at the first or last usable frequency, or the peak is one
        that its own uncertainty would put there.
    """

    peak: Quantity
    mean: Quantity
    half_low: Quantity | None
    half_high: Quantity | None
    at_end: bool


def spectrum_figures(x: Floats, y: Floats, usable: Flags, scatter: Floats) -> SpectrumFigures:
    """Return the figures of a curve with their uncertainties.

    Parameters
    ----------
    x, y : ndarray, shape (g,)
        Frequency and NPS.
    usable : ndarray of bool, shape (g,)
        False where detrending has taken too much.
    scatter : ndarray, shape (g, g)
        Relative covariance of y.

    Notes
    -----
    The uncertainties are standard deviations over curves drawn with that covariance, always the
    same draws (Monte-Carlo propagation, JCGM 101:2008).
    """
    values, vectors = np.linalg.eigh(scatter)
    root = vectors * np.sqrt(np.clip(values, 0.0, None))
    rng = np.random.default_rng(SEED)
    noise = rng.standard_normal((DRAWS, len(x))) @ root.T
    doubt = np.sqrt(np.diag(scatter))
    drawn = [_figures(x, np.maximum(y * (1.0 + e), 0.0), usable, doubt) for e in noise]
    found = _figures(x, y, usable, doubt)
    doubts = [np.array([d[i] for d in drawn]) for i in range(4)]
    low, high = (_half(found[i], doubts[i]) for i in (2, 3))
    first, last = x[usable][[0, -1]]
    return SpectrumFigures(
        peak=Quantity(found[0], "mm⁻¹", float(doubts[0].std())),
        mean=Quantity(found[1], "mm⁻¹", float(doubts[1].std())),
        half_low=low,
        half_high=high,
        at_end=not first < found[0] < last,
    )


def _half(value: float, drawn: Floats) -> Quantity | None:
    """Return a half-power frequency if nearly every drawn curve has one too."""
    kept = drawn[np.isfinite(drawn)]
    if not math.isfinite(value) or len(kept) < 0.9 * len(drawn):
        return None
    return Quantity(value, "mm⁻¹", float(kept.std()))


def _figures(
    x: Floats, y: Floats, usable: Flags, doubt: Floats
) -> tuple[float, float, float, float]:
    xs, ys = x[usable], y[usable]
    peak, height = peak_frequency(xs, ys)
    low, high = _half_power(xs, ys, peak, height / 2)
    return peak, mean_frequency(xs, ys, doubt[usable]), low, high


def peak_frequency(x: Floats, y: Floats) -> tuple[float, float]:
    """Return where a curve is largest, and its height there.

    A cubic is fitted to the samples around the largest one that exceed 70 % of it, so that a
    lopsided peak is not pulled to its flatter side; its largest value within them counts.

    Examples
    --------
    >>> f = np.linspace(0.02, 2.0, 100)
    >>> peak, _ = peak_frequency(f, f * np.exp(-(f**2)))
    >>> round(peak, 3)  # 1/√2
    0.708
    """
    k = int(np.argmax(y))
    below = y < PEAK_SHARE * y[k]
    start = int(np.flatnonzero(below[:k])[-1]) + 1 if below[:k].any() else 0
    stop = k + int(np.flatnonzero(below[k:])[0]) if below[k:].any() else len(y)
    n = stop - start
    if n < 4:
        return _parabola(x, y, k)
    span = (x[stop - 1] - x[start]) / 2
    t = (x[start:stop] - x[start]) / span - 1.0
    degree = 3 if n < 7 else 4
    fit = np.polynomial.polynomial.polyfit(t, y[start:stop], degree)
    fine = np.linspace(-1.0, 1.0, 20 * n + 1)
    curve = np.polynomial.polynomial.polyval(fine, fit)
    best = int(np.argmax(curve))
    return float(x[start] + (fine[best] + 1.0) * span), float(curve[best])


def _parabola(x: Floats, y: Floats, k: int) -> tuple[float, float]:
    if k in (0, len(y) - 1):
        return float(x[k]), float(y[k])
    fit = np.polynomial.polynomial.polyfit(x[k - 1 : k + 2] - x[k], y[k - 1 : k + 2], 2)
    if fit[2] >= 0:
        return float(x[k]), float(y[k])
    shift = float(np.clip(-fit[1] / (2 * fit[2]), x[k - 1] - x[k], x[k + 1] - x[k]))
    return float(x[k]) + shift, float(np.polynomial.polynomial.polyval(shift, fit))


def mean_frequency(x: Floats, y: Floats, doubt: Floats | None = None) -> float:
    """Return ∫ f S df / ∫ S df over a radial curve, from 0 to its last ring's outer edge.

    Below its first frequency the curve is continued as :func:`.spectrum_low.continuation` says,
    with the relative uncertainty `doubt` of each sample.

    Examples
    --------
    >>> f = np.linspace(0.02, 5.0, 250)
    >>> round(mean_frequency(f, f * np.exp(-(f**2))), 3)  # √π/2
    0.886
    """
    step = float(x[1] - x[0]) if len(x) > 1 else float(x[0])
    missing = max(math.ceil(float(x[0]) / step - 0.5), 0)
    below = float(x[0]) - step * np.arange(missing, 0, -1)
    known = np.full(len(x), 0.01) if doubt is None else doubt
    filled = continued(x, y, known, np.maximum(below, 0.0))
    frequency, power = np.concatenate([below, x]), np.concatenate([filled, y])
    edges = np.concatenate([[0.0], (frequency[1:] + frequency[:-1]) / 2, [x[-1] + step / 2]])
    middle, width = (edges[1:] + edges[:-1]) / 2, np.diff(edges)
    total = float(np.sum(power * width))
    return float(np.sum(middle * power * width)) / total if total > 0 else float(x[0])


def _half_power(x: Floats, y: Floats, peak: float, level: float) -> tuple[float, float]:
    """Return the nearest crossings of a level below and above the peak; NaN for none."""
    below, above = x <= peak, x >= peak
    low = _crossing(x[below][::-1], y[below][::-1], level)
    high = _crossing(x[above], y[above], level)
    return low, high


def _crossing(x: Floats, y: Floats, level: float) -> float:
    under = np.flatnonzero(y < level)
    if not len(under):
        return math.nan
    k = int(under[0])
    if k == 0:
        return float(x[0])
    share = (y[k - 1] - level) / (y[k - 1] - y[k])
    return float(x[k - 1] + share * (x[k] - x[k - 1]))
