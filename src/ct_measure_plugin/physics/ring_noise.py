"""Noise along the radius in polar means: its power, what whitens it, what chance makes of it."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from scipy import fft, ndimage, stats

from ct_measure_plugin.physics.ring_layers import Deviations, Layer, smooth_matrix
from ct_measure_plugin.physics.ring_polar import SECTORS

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.ring_polar import Polar

    Floats = NDArray[np.float64]

__all__ = ["by_chance", "leveled", "radial_power", "whitening"]

#: Drawn fields of noise; they fix a probability of 5 % to about 1 %.
DRAWS, BLOCK = 400, 20
SEED = 6

#: Radial steps over which noise may be correlated, and over which a trend is taken out.
LAGS, TREND = 20, 41

#: Degree of the polynomial in the radius that takes a cup out.
CUP_DEGREE = 8

#: Taps of the whitening filter to either side, and the least power it divides by.
TAPS, LEAST_POWER = 10, 0.05


def leveled(polar: Polar, means: Floats) -> Floats:
    """Return the means less a smooth curve through the circles' means: a cup is no ring.

    Circles that leave the curve by over three times the median misfit are drawn to it, so that a
    ring does not bend it.
    """
    pixels = polar.count.sum(axis=1)
    held = np.flatnonzero(pixels > 0)
    circle = np.sum(means * polar.count, axis=1)[held] / pixels[held]
    matrix = smooth_matrix(len(held), pixels[held], CUP_DEGREE)
    curve = matrix @ circle
    for _ in range(5):
        rest = circle - curve
        most = 3.0 * 1.4826 * float(np.median(np.abs(rest)))
        curve = matrix @ (curve + np.clip(rest, -most, most))
    found = means.copy()
    found[held] -= curve[:, None]
    return np.where(polar.count > 0, found, 0.0)


def whitening(power: Floats) -> Floats:
    """Return the taps of a filter along the radius that makes noise of this power white.

    A ring stands out most behind it: in filtered backprojection the amplitude of a ring has the
    shape of the root of the noise's power, so that a filter that levels the one sharpens the other.
    """
    level = np.maximum(power, LEAST_POWER * power.mean())
    response = fft.irfft(1.0 / np.sqrt(level))
    taps = np.concatenate([response[-TAPS:], response[: TAPS + 1]])
    taper = 1.0 - np.abs(np.arange(-TAPS, TAPS + 1)) / (TAPS + 1)
    found: Floats = taps * taper
    return found / float(np.sqrt(np.sum(found**2)))


def radial_power(polar: Polar, means: Floats) -> Floats:
    """Return the power spectrum along the radius of noise of unit variance.

    From the autocovariance of each sector's means, less their circle's mean and a running mean,
    up to ten pixels; rings that stand out are held to three times the median energy.
    """
    held = polar.count > 0
    root = np.sqrt(polar.count)
    circle = np.sum(means * polar.count, axis=1) / np.maximum(polar.count.sum(axis=1), 1.0)
    rest = np.where(held, means - circle[:, None], 0.0)
    size = ndimage.correlate1d(held.astype(float), np.ones(TREND), axis=0, mode="constant")
    trend = ndimage.correlate1d(rest, np.ones(TREND), axis=0, mode="constant")
    unit = np.where(held, rest - trend / np.maximum(size, 1.0), 0.0) * root
    energy = np.sqrt(np.mean(unit**2, axis=1, keepdims=True))
    middle = float(np.median(energy[held.any(axis=1)]))
    unit *= np.minimum(1.0, np.sqrt(3.0) * middle / np.maximum(energy, 1e-300))
    lags = np.arange(min(LAGS, len(unit) - 1) + 1)
    pairs = [float(np.sum(held[k:] & held[: len(held) - k])) for k in lags]
    cover = [float(np.sum(unit[k:] * unit[: len(unit) - k])) for k in lags]
    rho = np.array([c / max(p, 1.0) for c, p in zip(cover, pairs, strict=True)])
    rho = rho / rho[0] * (1.0 - lags / (LAGS + 1)) if rho[0] > 0 else (lags == 0).astype(float)
    length = fft.next_fast_len(len(unit) + LAGS, real=True)
    lagged = np.zeros(length)
    lagged[lags] = rho
    lagged[-lags[1:]] = rho[1:]
    power: Floats = np.clip(fft.rfft(lagged).real, 0.0, None)
    return power


def by_chance(polar: Polar, layers: list[Layer], power: Floats) -> Any:
    """Return the distribution of the largest score of noise: Gumbel's, from drawn fields.

    The limit law of largest values (E. J. Gumbel, Statistics of Extremes, 1958), through the
    median and the 95th percentile.
    """
    rng = np.random.default_rng(SEED)
    steps = len(polar.radius_mm)
    length = fft.next_fast_len(steps + LAGS, real=True)
    root = np.sqrt(np.maximum(polar.count, 1.0)).astype(np.float32)
    gain = np.sqrt(power)[:, None].astype(np.float32)
    largest = np.zeros(DRAWS)
    for begin in range(0, DRAWS, BLOCK):
        white = rng.standard_normal((BLOCK, length, SECTORS), dtype=np.float32)
        drawn = fft.irfft(fft.rfft(white, axis=1) * gain, n=length, axis=1)[:, :steps] / root
        for layer in layers:
            score = Deviations(layer, drawn).largest()
            largest[begin : begin + BLOCK] = np.maximum(largest[begin : begin + BLOCK], score)
    middle, high = (float(q) for q in np.quantile(largest, (0.5, 0.95)))
    low_at, high_at = (float(q) for q in stats.gumbel_r.ppf((0.5, 0.95)))
    width = (high - middle) / (high_at - low_at)
    return stats.gumbel_r(middle - width * low_at, width)
