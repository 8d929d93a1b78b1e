"""Discs in noise of known spectrum: their means, what is stated of them, and the truth."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy import fft, special

from ct_measure_plugin.physics.coverage import plane_coverage
from ct_measure_plugin.physics.noise_correlation import MeanDoubt, doubt_of_mean
from ct_measure_plugin.physics.regions import Disc

SIDE = 256  # of a field, cut into patches
FREQUENCY = np.hypot(*np.meshgrid(fft.fftfreq(SIDE), fft.rfftfreq(SIDE), indexing="ij"))
HANN = np.where(FREQUENCY < 0.5, 0.5 + 0.5 * np.cos(2 * np.pi * FREQUENCY), 0)
#: Amplitude filters. The ramp's power |f| is that of filtered backprojection (Riederer, Pelc and
#: Chesler 1978); with the Hann window it is no member of either list of spectra.
FILTERS = {
    "white": np.ones_like(FREQUENCY),
    "smooth": np.exp(-2 * (np.pi * 1.0 * FREQUENCY) ** 2),  # Gaussian of 1 px
    "smoother": np.exp(-2 * (np.pi * 1.5 * FREQUENCY) ** 2),
    "ramp": np.sqrt(FREQUENCY) * np.exp(-((3 * FREQUENCY) ** 2) / 2),
    "ramp with Hann": np.sqrt(FREQUENCY) * HANN,
}

_BLOB = np.exp(-((2 * np.pi * 2.0 * FREQUENCY) ** 2))
_LEVEL = fft.irfft2(_BLOB, (SIDE, SIDE))[0, 0]
#: Three tenths of the variance white, the rest filtered by a Gaussian of 2 px; and a ramp under a
#: Hann window that ends at half the Nyquist frequency.
BESIDE = {
    "white and smooth": np.sqrt(0.3 + 0.7 * _BLOB / _LEVEL),
    "soft ramp": np.sqrt(FREQUENCY)
    * np.where(FREQUENCY < 0.25, 0.5 + 0.5 * np.cos(4 * np.pi * FREQUENCY), 0),
}
EVERY = FILTERS | BESIDE


def fields(kind: str, count: int, seed: int) -> np.ndarray:
    """Return periodic fields of Gaussian noise, shape (count, SIDE, SIDE)."""
    white = np.random.default_rng(seed).standard_normal((count, SIDE, SIDE))
    return fft.irfft2(fft.rfft2(white) * EVERY[kind], (SIDE, SIDE))


@dataclass(frozen=True)
class Discs:
    """What is stated of equal discs in noise of one kind; the truth of every mean is 0."""

    kind: str
    weights: np.ndarray
    means: np.ndarray
    doubts: list[MeanDoubt]

    @cached_property
    def errors(self) -> np.ndarray:
        return np.sqrt([doubt.variance_of_mean for doubt in self.doubts])

    @cached_property
    def truth(self) -> float:
        """The standard deviation of the means, from the filter."""
        rho = fft.irfft2(EVERY[self.kind] ** 2, (SIDE, SIDE))
        pairs = fft.irfft2(np.abs(fft.rfft2(self.weights, (SIDE, SIDE))) ** 2, (SIDE, SIDE))
        return math.sqrt(float(np.sum(rho * pairs))) / float(self.weights.sum())

    def covered(self) -> float:
        """How often ±1.96 stated standard errors hold the truth."""
        return covered(self.means, self.doubts)

    def expected(self) -> float:
        """The same, averaged over the known distribution of the mean: steadier, with fewer discs.

        It takes the mean and what is stated of it as independent.
        """
        return float(np.mean(2 * special.ndtr(1.96 * self.errors / self.truth) - 1))

    def ratio(self) -> float:
        """Median stated standard error over the true one."""
        return float(np.median(self.errors)) / self.truth


def covered(means: np.ndarray, doubts: list[MeanDoubt]) -> float:
    """Return how often ±1.96 standard errors hold a truth of 0."""
    errors = np.sqrt([doubt.variance_of_mean for doubt in doubts])
    return float(np.mean(np.abs(means) <= 1.96 * errors))


def discs(kind: str, radius: float, count: int, seed: int) -> Discs:
    """Return discs of a radius in pixels, off the middle of their pixel."""
    step = 32 if radius < 9 else 64  # the noise is shared over 6 px at most
    middle = step / 2
    cover = plane_coverage(
        Disc((middle + 0.3, middle - 0.2), radius), (step, step), spacing_mm=(1, 1)
    )
    parts = SIDE // step
    images = fields(kind, math.ceil(count / parts**2), seed)
    patches = images.reshape(-1, parts, step, parts, step).swapaxes(2, 3).reshape(-1, step, step)
    patches = patches[:count, cover.rows, cover.columns]
    means = np.sum(patches * cover.weights, axis=(1, 2)) / cover.weights.sum()
    doubts = [doubt_of_mean(patch, cover.weights, (1.0, 1.0)) for patch in patches]
    return Discs(kind, cover.weights, means, doubts)
