"""Rings and arcs in polar means: how strong, and whether chance alone makes them.

A ring at a radius is looked for in two shapes: a mean over a core of 1, 3 or 5 pixels minus the
means of twice as many on either side, and what a bad channel makes; linear trends cancel. Arcs of
a quarter of the circle up to the whole are tried. What chance makes of the largest one is drawn:
noise of the same correlation along the radius, on the same pixels, through the same steps. Each
ring is fitted and taken out before the next one is sought.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from scipy import fft, ndimage

from ct_measure_plugin.physics.ring_layers import (
    ARCS,
    CORES,
    Deviations,
    Layer,
    channel_profile,
    core_profile,
)
from ct_measure_plugin.physics.ring_noise import by_chance, leveled, radial_power, whitening
from ct_measure_plugin.physics.ring_polar import SECTORS
from ct_measure_plugin.physics.ring_removal import ring_model

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.ring_polar import Polar

    Floats = NDArray[np.float64]

__all__ = ["Ring", "Search", "search", "strength"]

#: Rings beyond so many are not told apart.
MOST_RINGS = 50

#: Share of a ring's own score that may be left of it within so many steps, and of the strongest
#: one's score anywhere: no ring of its own. (Seen: 8 % and 1.5 % of rings of 10 to 50 times the
#: pixels' SD.)
GUARD, AROUND, FAR_GUARD = 0.1, 16, 0.02


@dataclass(frozen=True, slots=True)
class Ring:
    """A ring or arc.

    Attributes
    ----------
    step : int
        Radial step where its score is largest.
    place : int
        Radial step of its middle, where its level is largest.
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
    fitted : ndarray, shape (steps, sectors)
        What the rings add, as they were fitted.
    threshold : float
        Score that chance exceeds with probability `level`.
    repeats : float
        Number of neighbouring steps whose squared amplitudes count as one.
    """

    worst: Ring
    rings: tuple[Ring, ...]
    amplitude: Floats
    doubt: Floats
    deviation: Floats
    fitted: Floats
    threshold: float
    repeats: float


def search(polar: Polar, level: float = 0.05) -> Search | None:
    """Search an image for rings; None if no step has both sides.

    Parameters
    ----------
    polar : Polar
        The image.
    level : float
        Probability of a false alarm.
    """
    means = leveled(polar, polar.means)
    power = radial_power(polar, means)
    taps = whitening(power)
    layers = _layers(polar, taps)
    if not layers:
        return None
    chance = by_chance(polar, layers, power)
    threshold = float(chance.isf(level))
    hunt = _Hunt(polar, means, layers, power, chance)
    rings = hunt.rings_over(threshold)
    first = Deviations(Layer(polar, CORES[0]), means[None])
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
        hunt.taken,
        threshold,
        _repeats(power),
    )


def strength(polar: Polar) -> float:
    """Return the largest score of an image; 0 if none is known."""
    means = leveled(polar, polar.means)
    layers = _layers(polar, whitening(radial_power(polar, means)))
    return max((float(Deviations(layer, means[None]).largest()[0]) for layer in layers), default=0)


def _layers(polar: Polar, taps: Floats) -> list[Layer]:
    """Return the shapes that are looked for, where there is room for them."""
    every = [Layer(polar, core, taps) for core in CORES]
    every.append(Layer(polar, CORES[0], taps, channel_profile()))
    return [layer for layer in every if layer.valid.any()]


class _Hunt:
    """Rings taken out of an image one after the other.

    Their amplitude is that of the deviations of the same core, not whitened.
    """

    def __init__(
        self, polar: Polar, means: Floats, layers: list[Layer], power: Floats, chance: Any
    ) -> None:
        self.polar, self.rest, self.layers, self.chance = polar, means, layers, chance
        self.power, self.taps = power, whitening(power)
        self.rings: list[Ring] = []
        self.taken = np.zeros_like(means)
        self.lobes = [np.zeros(layer.weight.shape[0]) for layer in layers]

    def rings_over(self, threshold: float) -> list[Ring]:
        """Return the strongest arc, and all others above the threshold, each less those before."""
        while len(self.rings) < MOST_RINGS:
            found, sectors = self._strongest(threshold)
            if self.rings and found.score <= threshold:
                break
            self.rings.append(found)
            if found.score <= threshold:
                break
            self._take_out(found.step, sectors)
        return self.rings

    def _strongest(self, threshold: float) -> tuple[Ring, NDArray[np.intp]]:
        scores = []
        for layer, lobes in zip(self.layers, self.lobes, strict=True):
            seen = Deviations(layer, self.rest[None])
            score = seen.scores()[0] / layer.inflation(seen.shared())
            if self.rings:
                self._clear(
                    score, lobes / np.where(seen.noise > 0, seen.noise, np.inf)[0], threshold
                )
            scores.append(score)
        best = max(range(len(scores)), key=lambda i: float(scores[i].max()))
        found_at = np.unravel_index(int(scores[best].argmax()), scores[best].shape)
        a, step, start = (int(v) for v in found_at)
        score = float(scores[best].max())
        start = 0 if ARCS[a] == SECTORS else start
        sectors = (start + np.arange(ARCS[a])) % SECTORS
        levels = [_level(plain, step, sectors) for plain in self._plain()]
        core, place, amplitude, doubt = max(levels, key=_significance)
        chance = float(self.chance.sf(score))
        found = Ring(step, place, core, ARCS[a], start, amplitude, doubt, score, chance)
        return found, sectors

    def _plain(self) -> list[Deviations]:
        """Return the deviations of every core that has room, not whitened."""
        layers = [Layer(self.polar, core) for core in CORES]
        return [Deviations(layer, self.rest[None]) for layer in layers if layer.valid.any()]

    def _clear(self, score: Floats, lobes: Floats, threshold: float) -> None:
        """Clear the scores at the rings that were found, and what may be left of their lobes."""
        near = ndimage.maximum_filter1d(lobes, 2 * AROUND + 1)
        left = np.maximum(GUARD * near, FAR_GUARD * self.rings[0].score)
        score[score <= threshold + left[:, None]] = 0.0
        for ring in self.rings:
            reach = 3 * ring.core
            score[:, max(ring.step - reach, 0) : ring.step + reach + 1] = 0.0

    def _take_out(self, step: int, sectors: NDArray[np.intp]) -> None:
        model = ring_model(self.polar, self.rest, self.power, self.taps, step, sectors)
        self.taken += model
        self.rest = leveled(self.polar, self.rest - model)  # the ring bent the smooth curve
        for layer, lobes in zip(self.layers, self.lobes, strict=True):
            of_unit = Deviations(layer, model[None]).scores(np.ones((1, len(model))))[0]
            np.maximum(lobes, of_unit.max(axis=(0, 2)), out=lobes)


def _level(
    plain: Deviations, step: int, sectors: NDArray[np.intp]
) -> tuple[int, int, float, float]:
    """Return core and step of an arc's largest deviation near a step, that, and its doubt."""
    core = plain.layer.core
    near = np.arange(max(step - core // 2, 0), min(step + core // 2 + 1, len(plain.sums[0])))
    weight = plain.layer.weight[np.ix_(near, sectors)].sum(axis=1)
    level = plain.sums[0][np.ix_(near, sectors)].sum(axis=1) / np.maximum(weight, 1.0)
    best = int(np.argmax(np.abs(level)))
    more = plain.layer.inflation(plain.shared())[ARCS.index(len(sectors)), near[best], 0]
    noise = float(more * plain.noise[0, near[best]])
    doubt = noise / math.sqrt(max(float(weight[best]), 1.0))
    return core, int(near[best]), float(level[best]), doubt


def _significance(level: tuple[int, int, float, float]) -> float:
    return abs(level[2]) / level[3] if level[3] > 0 else 0.0


def _repeats(power: Floats) -> float:
    """Return over how many steps the squares of the narrowest core's noise repeat themselves."""
    kernel = core_profile(CORES[0])
    length = 2 * (len(power) - 1)
    passed = power * np.abs(fft.rfft(kernel, n=length)) ** 2
    shared = fft.irfft(passed)
    return float(np.sum((shared / shared[0]) ** 2)) if shared[0] > 0 else 1.0
