"""The noise spectra a region's noise may have, each with how likely it is before looking.

Two thousand isotropic spectra ``S(f)``: white noise; a low-frequency shape (level, rising as
``|f|`` as filtered backprojection makes it, rising but not to zero, falling) times a roll-off
``exp(-(s f)^p)``, with or without a white floor. They are kept as a few principal spectra and a
table of coefficients, so that whatever is linear in `S` is computed for the few and follows for all
by one matrix product.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache, lru_cache
from typing import TYPE_CHECKING

import numpy as np
from scipy import fft, special

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["Geometry", "Library", "geometry", "library", "ring_frequencies"]

#: Roll-off lengths s in pixels (noise white to the eye, to blobs ten pixels across) and powers p
#: with their prior weights.
LENGTHS = np.geomspace(1.0, 20.0, 26)
POWERS = {2.0: 0.5, 3.0: 0.25, 5.0: 0.25}

#: Low-frequency shapes ((s f)² + k²)^(b/2): (b, k) and prior weight. Level spectra (smoothing) and
#: ramps (filtered backprojection, Riederer et al. 1978) carry most of it; k stands for the part of
#: the ramp that pixel sampling folds back to f = 0 (Kijewski and Judy 1987); b < 0 for a rise
#: towards low frequencies. The weights are a choice, made so that level and ramp spectra are
#: covered alike; the coverage test judges it.
SHAPES = {
    (0.0, 0.0): 6.0,
    (1.0, 0.0): 11.0,
    (1.0, 0.1): 0.5,
    (1.0, 0.3): 0.5,
    (2.0, 0.0): 0.3,
    (2.0, 0.2): 0.3,
    (-1.0, 0.4): 1.0,
    (-1.0, 0.15): 0.5,
    (0.5, 0.0): 0.3,
}

#: White floors as a fraction of the level 1, and their prior weights; prior of pure white noise.
FLOORS = {0.0: 0.9, 0.05: 0.05, 0.3: 0.05}
WHITE = 0.02

#: Frequencies of the table, cycles per pixel, to the corner of the square of resolved ones.
_F = (np.arange(240) + 0.5) / 240 * np.sqrt(0.5)

#: Principal spectra are kept down to this share of the largest: far below any region's noise.
_KEPT = 1e-5


@dataclass(frozen=True, slots=True, eq=False)
class Library:
    """The spectra: ``coefficients @ principal``, white noise apart.

    Attributes
    ----------
    coefficients : ndarray, shape (spectra, principal)
    principal : ndarray, shape (principal, frequencies)
        Times the area of each ring of frequencies.
    log_prior : ndarray, shape (1 + spectra,)
        Logarithm of the prior weights, white noise first.
    """

    coefficients: Floats
    principal: Floats
    log_prior: Floats


@cache
def ring_frequencies() -> tuple[Floats, Floats]:
    """Return the table's frequencies in cycles per pixel and the areas of their rings.

    >>> round(float(ring_frequencies()[1].sum()), 3)  # the square of resolved frequencies
    1.0
    """
    ring = 2 * np.pi * _F * (_F[1] - _F[0])
    beyond = np.minimum(0.5 / _F, 1.0)  # the ring's part inside the square of resolved frequencies
    return _F, ring * (1 - 4 / np.pi * np.arccos(beyond))


@cache
def library() -> Library:
    """Return the library; made once."""
    ring = ring_frequencies()[1]
    spectra, weights = [], []
    for s in LENGTHS:
        for (b, k), shape_weight in SHAPES.items():
            low = ((_F * s) ** 2 + k * k) ** (b / 2)
            for p, power_weight in POWERS.items():
                spectrum = low * np.exp(-((_F * s) ** p))
                spectrum = spectrum / np.sum(spectrum * ring)
                for floor, floor_weight in FLOORS.items():
                    spectra.append(spectrum * (1 - floor) + floor)
                    weights.append(shape_weight * power_weight * floor_weight)
    prior = np.array(weights) / np.sum(weights) * (1 - WHITE)
    u, d, vt = np.linalg.svd(np.array(spectra) * ring, full_matrices=False)
    kept = int(np.count_nonzero(d > _KEPT * d[0]))
    return Library(
        u[:, :kept] * d[:kept],
        np.ascontiguousarray(vt[:kept]),
        np.log(np.concatenate([[WHITE], prior])),
    )


@dataclass(frozen=True, slots=True, eq=False)
class Geometry:
    """Lags and frequencies that belong to a crop; independent of what it holds.

    Attributes
    ----------
    size : tuple of int
        Shape of the padded transform.
    ring : ndarray of int, shape (rows, columns of a half-plane)
        Bin of each lag.
    twice : ndarray
        2 for lags whose mirror image the half-plane leaves out.
    lag : ndarray, shape (bins,)
        Mean length of each bin's lags, in pixels of the finer step.
    frequency : ndarray, shape (k,)
        Frequencies of the periodogram, cycles per pixel.
    step : float
        Their distance.
    wave : ndarray, shape (k, bins)
        J0(2πfr): the mean of a plane wave over all directions.
    covariance : ndarray, shape (principal, bins)
        The principal spectra's autocovariances.
    """

    size: tuple[int, int]
    ring: NDArray[np.intp]
    twice: Floats
    lag: Floats
    frequency: Floats
    step: float
    wave: Floats
    covariance: Floats

    def by_lag(self, autocorrelation: Floats) -> Floats:
        """Sum an autocorrelation (half-plane) over the lags of each bin."""
        weights = (autocorrelation * self.twice).ravel()
        sums: Floats = np.bincount(self.ring.ravel(), weights).astype(float)
        return sums[: len(self.lag)]


@lru_cache(maxsize=64)
def geometry(shape: tuple[int, int], radius: float, stretch: tuple[float, float]) -> Geometry:
    """Return lags, frequencies and tables for a crop.

    Parameters
    ----------
    shape : (int, int)
        Of the crop.
    radius : float
        Radius of the disc of the region's area, in pixels of the finer step: frequencies start at
        0.6/radius, where removing the mean no longer shows, and lie 0.25/radius apart.
    stretch : (float, float)
        Row and column step over the finer one.
    """
    size = tuple(fft.next_fast_len(2 * n, real=True) for n in shape)
    rows = np.arange(size[0])
    rows = np.where(rows > size[0] // 2, rows - size[0], rows)
    columns = np.arange(size[1] // 2 + 1)
    square = (rows[:, None] * stretch[0]) ** 2 + (columns[None, :] * stretch[1]) ** 2
    length = np.sqrt(square)
    # exact for short lags, quarters of a pixel beyond
    key = np.where(length < 8, np.rint(16 * square), 2048 + np.floor(4 * length)).astype(np.int64)
    inside = (np.abs(rows)[:, None] < shape[0]) & (columns[None, :] < shape[1])
    key[~inside] = key.max() + 1
    _, ring = np.unique(key, return_inverse=True)
    twice = np.where(columns == 0, 1.0, 2.0) * np.ones_like(length)
    last = int(ring.max()) + (1 if inside.all() else 0)
    count = np.bincount(ring.ravel(), twice.ravel())[:last]
    lag = np.bincount(ring.ravel(), (twice * length).ravel())[:last] / count
    highest = 0.5 / max(stretch)
    step = max(0.25 / radius, highest / 160)
    frequency = np.arange(min(0.6 / radius, 0.5 * highest), highest + 1e-9, step)
    return Geometry(
        (int(size[0]), int(size[1])),
        ring.reshape(length.shape),
        twice,
        lag,
        frequency,
        step,
        special.j0(2 * np.pi * frequency[:, None] * lag[None, :]),
        library().principal @ special.j0(2 * np.pi * _F[:, None] * lag[None, :]),
    )
