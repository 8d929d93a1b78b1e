"""Rings and arcs in polar means: how strong, and whether chance alone makes them.

A ring at a radius is a mean over a core of 1, 3 or 5 radial steps minus the means of twice as many
steps on either side; linear trends cancel. Arcs of a quarter of the circle up to the whole are
tried. What chance makes of the largest one is drawn: noise of the same correlation along the
radius, on the same pixels, through the same steps.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from scipy import fft, ndimage, stats

from ct_measure_plugin.physics.ring_layers import (
    ARCS,
    CORES,
    Deviations,
    Layer,
    smooth_matrix,
)
from ct_measure_plugin.physics.ring_polar import SECTORS

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.ring_polar import Polar

    Floats = NDArray[np.float64]

__all__ = ["Ring", "Search", "search", "strength"]

#: Drawn fields of noise; they fix a probability of 5 % to about 1 %.
DRAWS, BLOCK = 400, 20
SEED = 6

#: Radial steps over which noise may be correlated, and over which a trend is taken out.
LAGS, TREND = 10, 21

#: Degree of the polynomial in the radius that takes a cup out.
CUP_DEGREE = 8

#: Taps of the whitening filter to either side, and the least power it divides by.
TAPS, LEAST_POWER = 5, 0.1


@dataclass(frozen=True, slots=True)
class Ring:
    """A ring or arc.

    Attributes
    ----------
    step : int
        Radial step of its middle.
    place : int
        Radial step where its level is largest.
    core : int
        Its width in steps.
    arc, start : int
        Its length in sectors, from sector `start` counter-clockwise.
    amplitude, doubt : float
        Its level over its surroundings, and the standard uncertainty.
    score : float
        Their ratio, without its sign.
    chance : float
        Probability that noise makes one as strong anywhere in the region.
    """

    step: int
    place: int
    core: int
    arc: int
    start: int
    amplitude: float
    doubt: float
    score: float
    chance: float


@dataclass(frozen=True, slots=True, eq=False)
class Search:
    """What was found.

    Attributes
    ----------
    worst : Ring
        The strongest one.
    rings : tuple of Ring
        All that chance exceeds at most at `level`, strongest first.
    amplitude, doubt : ndarray, shape (steps,)
        Mean over the circle of a core of one step minus its surroundings; NaN where a side is
        missing.
    deviation : ndarray, shape (steps, sectors)
        The same, sector by sector; 0 where it is not known.
    threshold : float
        Score that chance exceeds with probability `level`.
    """

    worst: Ring
    rings: tuple[Ring, ...]
    amplitude: Floats
    doubt: Floats
    deviation: Floats
    threshold: float


def search(polar: Polar, means: Floats, level: float = 0.05) -> Search | None:
    """Search polar means, shape (steps, sectors), for rings; None if no step has both sides.

    Parameters
    ----------
    polar : Polar
        The geometry.
    means : ndarray, shape (steps, sectors)
        Means over slices, or of one slice.
    level : float
        Probability of a false alarm.
    """
    means = _level_field(polar, means)
    plain = [Deviations(Layer(polar, core), means[None]) for core in CORES]
    power = _radial_power(polar, means)
    every = [Layer(polar, core, _whitening(power)) for core in CORES]
    layers = [layer for layer in every if layer.valid.any()]
    if not layers:
        return None
    found = [Deviations(layer, means[None]) for layer in layers]
    inflation = [layer.inflation(d.shared()) for layer, d in zip(layers, found, strict=True)]
    scores = [d.scores()[0] / more for d, more in zip(found, inflation, strict=True)]
    chance = _by_chance(polar, layers, power)
    threshold = float(chance.isf(level))
    rings = _peaks(plain, found, scores, chance, threshold)
    first = plain[0]
    layer, more = first.layer, first.layer.inflation(first.shared())
    pixels = layer.weight.sum(axis=1)
    known = pixels > 0
    amplitude, doubt = np.full(len(pixels), np.nan), np.full(len(pixels), np.nan)
    amplitude[known] = first.sums[0].sum(axis=1)[known] / pixels[known]
    doubt[known] = (more[-1, :, 0] * first.noise[0])[known] / np.sqrt(pixels[known])
    return Search(
        rings[0],
        tuple(ring for ring in rings if ring.score > threshold),
        amplitude,
        doubt,
        first.sums[0] / np.maximum(layer.weight, 1.0),
        threshold,
    )


def strength(polar: Polar, means: Floats) -> float:
    """Return the largest score of polar means, shape (steps, sectors); 0 if none is known."""
    means = _level_field(polar, means)
    taps = _whitening(_radial_power(polar, means))
    layers = [layer for layer in (Layer(polar, core, taps) for core in CORES) if layer.valid.any()]
    return max((float(Deviations(layer, means[None]).largest()[0]) for layer in layers), default=0)


def _level_field(polar: Polar, means: Floats) -> Floats:
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


def _whitening(power: Floats) -> Floats:
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


def _radial_power(polar: Polar, means: Floats) -> Floats:
    """Return the power spectrum along the radius of noise of unit variance.

    From the autocovariance of each sector's means, less their circle's mean and a running mean,
    up to ten steps; rings that stand out are held to three times the median energy.
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


def _by_chance(polar: Polar, layers: list[Layer], power: Floats) -> Any:
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


def _peaks(
    plain: list[Deviations],
    found: list[Deviations],
    scores: list[Floats],
    chance: Any,
    threshold: float,
) -> list[Ring]:
    """Return the strongest arc, and all others above the threshold, apart from one another.

    Their amplitude is that of the deviations of the same core, not whitened.
    """
    left = [score.copy() for score in scores]
    rings: list[Ring] = []
    while True:
        best = max(range(len(left)), key=lambda i: float(left[i].max()))
        score = float(left[best].max())
        if rings and score <= threshold:
            return rings
        layer = found[best].layer
        found_at = np.unravel_index(int(left[best].argmax()), left[best].shape)
        a, step, start = (int(v) for v in found_at)
        sectors = (start + np.arange(ARCS[a])) % SECTORS
        place, amplitude, doubt = _level(plain[CORES.index(layer.core)], step, sectors)
        rings.append(
            Ring(
                step=step,
                place=place,
                core=layer.core,
                arc=ARCS[a],
                start=start,
                amplitude=amplitude,
                doubt=doubt,
                score=score,
                chance=float(chance.sf(score)),
            )
        )
        for other, same in zip(left, found, strict=True):
            reach = 3 * max(same.layer.core, layer.core)
            other[:, max(step - reach, 0) : step + reach + 1] = 0.0
        if score <= 0:
            return rings


def _level(plain: Deviations, step: int, sectors: NDArray[np.intp]) -> tuple[int, float, float]:
    """Return the step of an arc's largest deviation near a step, that deviation, and its doubt."""
    reach = plain.layer.core // 2 + 1
    near = np.arange(max(step - reach, 0), min(step + reach + 1, len(plain.sums[0])))
    weight = plain.layer.weight[np.ix_(near, sectors)].sum(axis=1)
    level = plain.sums[0][np.ix_(near, sectors)].sum(axis=1) / np.maximum(weight, 1.0)
    best = int(np.argmax(np.abs(level)))
    noise = float(plain.noise[0, near[best]])
    return int(near[best]), float(level[best]), noise / math.sqrt(max(float(weight[best]), 1.0))
