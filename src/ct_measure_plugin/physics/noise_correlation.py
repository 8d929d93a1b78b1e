"""How far a region's mean can be trusted when neighbouring pixels share their noise.

The variance of a weighted mean is ``sum_lag C(lag) R(lag) / W**2``, with `C` the autocovariance of
the noise, `R` the autocorrelation of the weights and `W` their sum: the same integral as
∬ S |W(f)|² df over the noise power spectrum `S`. Here `S` is estimated from the region itself: its
ring-averaged autocovariance is fitted by spectra that are nowhere negative, so that a region of
few pixels still gives a spectrum that could exist.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import fft, optimize

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["MeanDoubt", "doubt_of_mean", "independent_doubt"]

#: Widths s of the model's Gaussian envelopes, in pixels: from noise that is white to the eye to
#: blobs eight pixels across.
WIDTHS = (1.0, 1.4, 2.0, 2.8, 4.0, 5.6, 8.0)

#: How much better a correlated model must fit than white noise, in units of the variance of one
#: squared correlation (2 for the two sides of a lag): white noise passes for correlated about once
#: in fifty regions.
CORRELATION_STANDS_OUT = 16.0

#: Longest lag looked at, in pixels; beyond it the envelopes above have died out.
LONGEST_LAG = 18


@dataclass(frozen=True, slots=True)
class MeanDoubt:
    """What the noise of a region leaves certain.

    Attributes
    ----------
    variance_of_mean : float
        Variance of the weighted mean, in squared units of the values.
    power_samples : float
        Number of independent samples as the sample variance sees them,
        ``W**2 / sum_lag rho(lag)**2 R(lag)``: twice the inverse squared relative uncertainty of
        the variance.
    reach : float
        Distance to which the noise is correlated (|rho| over 0.05), in the unit of the spacing; 0
        if the pixels are independent.
    """

    variance_of_mean: float
    power_samples: float
    reach: float


def independent_doubt(values: Floats, weights: Floats) -> MeanDoubt:
    """Return the doubt of a weighted mean of independent samples.

    >>> doubt = independent_doubt(np.array([1.0, 2.0, 3.0]), np.ones(3))
    >>> round(doubt.variance_of_mean, 12)  # s**2 / n
    0.333333333333
    """
    total = float(weights.sum())
    squares = float(np.sum(weights**2))
    residual = values - float(np.sum(weights * values)) / total
    spread = float(np.sum((weights * residual) ** 2))
    return MeanDoubt(spread / (total**2 - squares), total**2 / squares, 0.0)


def doubt_of_mean(values: Floats, weights: Floats, spacing_mm: tuple[float, ...]) -> MeanDoubt:
    """Return the doubt of a weighted mean under noise of unknown correlation.

    Parameters
    ----------
    values, weights : ndarray, shape (ny, nx) or (nz, ny, nx)
        The values on their grid and the coverage, 0 outside the region.
    spacing_mm : tuple of float
        Step along each axis.

    Notes
    -----
    Within a slice the noise is taken as isotropic and stationary. With ``r`` the residuals about
    the mean, the autocorrelation of ``w r`` divided by that of ``w`` estimates ``C(lag) - V``, V
    being the variance of the mean itself, which subtracting the sample mean takes away at every
    lag. Both are linear in the coefficients of the model spectrum

        S(f) = c + (a + b f²) exp(-π² s² f²),   all coefficients ≥ 0,

    (a: smooth noise; b: noise that vanishes at f = 0 as filtered backprojection's does), so a
    non-negative least-squares fit gives them for each width s, and the best s is kept. Between
    slices the correlation is taken from equal pixels, followed until it falls into its own noise.
    """
    steps = spacing_mm[-2:]
    stack = (values if values.ndim == 3 else values[None]).astype(float)
    cover = weights if weights.ndim == 3 else weights[None]
    total = float(cover.sum())
    white = independent_doubt(values[weights > 0], weights[weights > 0])
    residual = np.where(cover > 0, stack - float(np.sum(cover * stack)) / total, 0.0)
    signal = cover * residual
    if white.variance_of_mean == 0 or total < 16:
        return white
    lags = _lags(signal, cover, steps)
    model = _fit(lags, total)
    if model is None:
        return white
    slices, slice_power = _between_slices(signal, cover)
    variance = float(np.sum(model * lags.pairs)) / total**2 * slices
    rho = model / model[lags.zero]
    power = total**2 / float(np.sum(rho**2 * lags.pairs)) / slice_power
    correlated = lags.distance[np.abs(rho) > 0.05]
    return MeanDoubt(variance, max(power, 1.0), float(correlated.max(initial=0.0)))


@dataclass(frozen=True, slots=True, eq=False)
class _Lags:
    """Lags of a window about 0, flattened: lengths (mm and px²), covariance sums and pair sums."""

    distance: Floats
    square: Floats
    covariance: Floats
    pairs: Floats
    zero: int


def _lags(signal: Floats, cover: Floats, steps: tuple[float, ...]) -> _Lags:
    longest = [min(LONGEST_LAG, n - 1) for n in signal.shape[1:]]
    size = [
        fft.next_fast_len(n + m, real=True) for n, m in zip(signal.shape[1:], longest, strict=True)
    ]
    power = np.abs(fft.rfft2(np.concatenate([signal, cover]), size)) ** 2
    nz = len(signal)
    auto = fft.irfft2(np.stack([power[:nz].sum(0), power[nz:].sum(0)]), size)
    rows = np.arange(-longest[0], longest[0] + 1)
    columns = np.arange(longest[1] + 1)  # the other half mirrors this one
    covariance, pairs = auto[:, rows[:, None], columns[None, :]]
    pairs = np.where(pairs > 0.5, pairs, 0.0)
    twice = np.where(columns == 0, 1.0, 2.0)
    finest = min(steps)
    square_mm = (rows[:, None] * steps[0]) ** 2 + (columns[None, :] * steps[1]) ** 2
    return _Lags(
        np.sqrt(square_mm).ravel(),
        (square_mm / finest**2).ravel(),
        (np.where(pairs > 0, covariance, 0.0) * twice).ravel(),
        (pairs * twice).ravel(),
        int(longest[0] * (longest[1] + 1)),
    )


def _fit(lags: _Lags, total: float) -> Floats | None:
    """Return the model autocovariance at every lag, or None if white noise explains them."""
    ring = np.rint(np.sqrt(lags.square)).astype(int)
    pairs = np.bincount(ring, lags.pairs)
    used = pairs > 0
    weight = np.sqrt(pairs[used])
    measured = np.bincount(ring, lags.covariance)[used] / pairs[used]
    if not measured[0] > 0:
        return None
    target = measured / measured[0] * weight

    def attempt(basis: Floats) -> tuple[float, Floats]:
        shapes = np.stack([np.bincount(ring, b * lags.pairs)[used] for b in basis], axis=1)
        own = (basis @ lags.pairs) / total**2  # each shape's variance of the mean
        design = (shapes / pairs[used, None] - own) * weight[:, None]
        coefficients, misfit = optimize.nnls(design, target)
        return float(misfit), measured[0] * (coefficients @ basis)

    white = np.zeros((1, len(lags.square)))
    white[0, lags.zero] = 1.0
    alone, _ = attempt(white)
    least, best = math.inf, None
    for width in WIDTHS:
        q = lags.square / width**2
        envelope = np.exp(-q)
        # their transforms: exp(-π² s² f²) and f² exp(-π² s² f²), up to a factor
        misfit, model = attempt(np.concatenate([white, [envelope, (1 - q) * envelope]]))
        if misfit < least:
            least, best = misfit, model
    return best if alone**2 - least**2 > CORRELATION_STANDS_OUT else None


def _between_slices(signal: Floats, cover: Floats) -> tuple[float, float]:
    """Return by which factors slice correlation raises the variance and lowers the samples."""
    n = len(signal)
    factor, power = 1.0, 1.0
    zero = float(np.sum(signal * signal))
    for k in range(1, n):
        pairs = float(np.sum(cover[:-k] * cover[k:]))
        if pairs <= 0:
            break
        norm = zero / float(np.sum(cover**2)) * pairs
        rho = float(np.sum(signal[:-k] * signal[k:])) / norm
        if abs(rho) < 2.0 / math.sqrt(pairs):
            break
        share = pairs / float(np.sum(cover**2))
        factor += 2 * rho * share
        power += 2 * rho**2 * share
    return max(factor, 0.1), power
