"""The standard error of a small region's mean: exact likelihoods under a prior fit for CT.

A region of a few pixels across shows little of its noise spectrum, but it does show whether
neighbours share their noise. Every spectrum of a short list gives the pixels a covariance matrix;
how well it explains the differences between them (the restricted likelihood, free of the mean and,
with Jeffreys' prior, of the level), times its prior, is its weight. Each spectrum leaves the mean
with a Student distribution; the standard error is the half-width of the central 95 % of their
mixture over 1.96, so that what the pixels cannot decide is paid for once and stays bounded.
"""

from __future__ import annotations

from functools import cache, lru_cache
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from scipy import special

from ct_measure_plugin.physics.noise_spectra import ring_frequencies

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["SmallDoubt", "doubt_of_few"]

#: Roll-off lengths s in pixels. A Gaussian filter of σ pixels has s = 2πσ, so level spectra reach
#: from noise white to the eye to a filter of 3 px. Ramps end where their peak, 1/(s√2), is at 0.12
#: cycles per pixel: a longer one looks like a smoothed field to a region smaller than its waves.
LENGTHS = np.geomspace(1.5, 20.0, 15)
LONGEST_RAMP = 6.0

#: Low-frequency power b of f^b, roll-off power p, and prior weight. A level spectrum's weight is
#: multiplied by s²/8: a small region sees least of a smooth field, and would take it for
#: less than it is. The weights are a choice; the coverage test judges it.
SHAPES = {(0, 2.0): 1.0, (1, 2.0): 5.0, (1, 3.0): 5.0}

#: Prior of white noise.
WHITE = 0.1

#: White floor added to models and data alike, in units of the variance: keeps combinations of
#: pixels that hold next to no noise from outvoting the others when no spectrum fits exactly.
FLOOR = 0.002


class SmallDoubt(NamedTuple):
    """Squared standard error, independent samples, reach in finer pixels, degrees of freedom."""

    variance_of_mean: float
    power_samples: float
    reach: float
    freedom: float


@cache
def _spectra() -> tuple[Floats, Floats]:
    """Return the spectra times their ring areas, and the prior weights, white noise first."""
    frequency, ring = ring_frequencies()
    spectra, weights = [], []
    for s in LENGTHS:
        for (b, p), weight in SHAPES.items():
            if b and s > LONGEST_RAMP:
                continue
            spectrum = frequency**b * np.exp(-((frequency * s) ** p)) * ring
            spectra.append(spectrum / spectrum.sum())
            weights.append(weight if b else weight * s**2 / 8)
    prior = np.array(weights) / np.sum(weights) * (1 - WHITE)
    return np.array(spectra), np.concatenate([[WHITE], prior])


class _Slice(NamedTuple):
    """What one slice's pixels and the spectra give before any value is seen."""

    distance: Floats  # (lags,)
    correlation: Floats  # (spectra, lags)
    pairs: Floats  # (lags,) sums of products of weights
    inverse: Floats  # (spectra, n, n) of the covariance with its floor
    rows: Floats  # (spectra, n) its row sums
    log_determinant: Floats  # (spectra,)


@lru_cache(maxsize=16)
def _slice(cover: bytes, shape: tuple[int, int], stretch: tuple[float, float]) -> _Slice:
    weights = np.frombuffer(cover).reshape(shape)
    y, x = np.nonzero(weights)
    w = weights[y, x]
    square = np.subtract.outer(y * stretch[0], y * stretch[0]) ** 2
    square = square + np.subtract.outer(x * stretch[1], x * stretch[1]) ** 2
    lags, which = np.unique(np.round(square, 6), return_inverse=True)
    which = which.reshape(square.shape)
    distance = np.sqrt(lags)
    waves = special.j0(2 * np.pi * ring_frequencies()[0][:, None] * distance)
    correlation = np.vstack([(lags == 0).astype(float), _spectra()[0] @ waves])
    covariance = correlation[:, which] + FLOOR * np.eye(len(w))
    inverse: Floats = np.linalg.inv(covariance).astype(float)
    return _Slice(
        distance,
        correlation,
        np.bincount(which.ravel(), np.multiply.outer(w, w).ravel(), len(lags)).astype(float),
        inverse,
        inverse.sum(axis=2),
        np.linalg.slogdet(covariance)[1],
    )


def doubt_of_few(
    residual: Floats, cover: Floats, stretch: tuple[float, float], shared: tuple[float, float]
) -> SmallDoubt:
    """Return the doubt of the mean of few pixels a slice.

    Parameters
    ----------
    residual, cover : ndarray, shape (nz, ny, nx)
        Values less their weighted mean, and weights; 0 outside the region.
    stretch : (float, float)
        Row and column step over the finer one.
    shared : (float, float)
        Factors by which correlation between slices raises the variance of the mean and lowers the
        number of independent samples.

    Returns
    -------
    SmallDoubt

    Examples
    --------
    >>> noise = np.random.default_rng(1).normal(0, 10, (1, 6, 6))
    >>> found = doubt_of_few(noise - noise.mean(), np.ones((1, 6, 6)), (1.0, 1.0), (1.0, 1.0))
    >>> 1.2 < found.variance_of_mean**0.5 < 2.2  # 10/6 = 1.7
    True
    """
    prior = _spectra()[1]
    total, pixels = float(cover.sum()), int(np.count_nonzero(cover))
    quadratic, cross, ones, log_det, trace, bent, variance, power = np.zeros((8, len(prior)))
    for plane, mask in zip(residual, cover, strict=True):
        x = plane[mask > 0]
        if not x.size:
            continue
        own = _slice(np.ascontiguousarray(mask, float).tobytes(), mask.shape, stretch)
        quadratic += (own.inverse @ x) @ x
        cross += own.rows @ x
        ones += own.rows.sum(axis=1)
        trace += np.trace(own.inverse, axis1=1, axis2=2)
        bent += np.sum(own.rows**2, axis=1)
        log_det += own.log_determinant
        variance += own.correlation @ own.pairs
        power += own.correlation**2 @ own.pairs
    spread = float(np.sum(cover * residual**2)) / total * pixels / (pixels - 1)
    level = quadratic - cross**2 / ones + FLOOR * spread * (trace - bent / ones)
    freedom = max((pixels - 1) / shared[1], 1.0)
    share = np.log(prior) - (log_det + np.log(ones) + (pixels - 1) * np.log(level)) / 2 / shared[1]
    share = np.exp(share - share.max())
    share /= share.sum()
    scale = np.sqrt(level / (pixels - 1) * np.maximum(variance, 0.0) * shared[0]) / total
    half = _half_width(share, scale, freedom)
    rho = share @ own.correlation
    far = own.distance[np.abs(rho) > 0.1]
    return SmallDoubt(
        float((half / special.ndtri(0.975)) ** 2),
        max(total**2 / float(share @ power) / shared[1], 1.0),
        float(far.max(initial=0.0)),
        freedom,
    )


def _half_width(share: Floats, scale: Floats, freedom: float) -> float:
    """Return the half-width of the central 95 % of a mixture of Student distributions."""
    kept = (share > 1e-4) & (scale > 0)
    share, scale = share[kept] / share[kept].sum(), scale[kept]
    factor = float(special.stdtrit(freedom, 0.975))
    low, high = factor * scale.min(), factor * scale.max()  # the widest member bounds it
    for _ in range(30):
        middle = (low * high) ** 0.5
        if float(share @ special.stdtr(freedom, middle / scale)) < 0.975:
            low = middle
        else:
            high = middle
    return float(high)
