"""How far a region's mean can be trusted when neighbouring pixels share their noise.

The variance of a weighted mean is ``sum_lag C(lag) R(lag) / W**2``, with `C` the autocovariance of
the noise, `R` the autocorrelation of the weights and `W` their sum: the same integral as
∬ S |W(f)|² df over the noise power spectrum. `C` is estimated from the region itself, out to the
distance where its ring average can no longer be told from zero.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import fft

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["MeanDoubt", "doubt_of_mean", "independent_doubt"]


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
        Distance to which noise correlation was followed, in the unit of the spacing; 0 if the
        pixels are independent.
    """

    variance_of_mean: float
    power_samples: float
    reach: float


def independent_doubt(values: Floats, weights: Floats) -> MeanDoubt:
    """Return the doubt of a weighted mean of independent samples.

    >>> doubt = independent_doubt(np.array([1.0, 2.0, 3.0]), np.ones(3))
    >>> doubt.variance_of_mean  # s**2 / n
    0.3333333333333333
    """
    total = float(weights.sum())
    squares = float(np.sum(weights**2))
    residual = values - float(np.sum(weights * values)) / total
    spread = float(np.sum((weights * residual) ** 2))
    return MeanDoubt(spread / (total**2 - squares), total**2 / squares, 0.0)


def doubt_of_mean(values: Floats, weights: Floats, spacing_mm: tuple[float, ...]) -> MeanDoubt:
    """Return the doubt of a weighted mean under noise of unknown, isotropic correlation.

    Parameters
    ----------
    values, weights : ndarray, shape (ny, nx) or (nz, ny, nx)
        The values on their grid and the coverage, 0 outside the region.
    spacing_mm : tuple of float
        Step along each axis.

    Notes
    -----
    With ``r`` the residuals about the mean and ``A`` the autocorrelation of ``w r``, summed over
    the lags followed, ``A / (W**2 - R)`` is unbiased for the variance of the mean: subtracting the
    sample mean lowers every covariance by just that variance.

    References
    ----------
    .. [1] R. F. Wagner, D. G. Brown and M. S. Pastel, Med. Phys. 6 (1979) 83 (from memory):
       variance of a region's mean from the noise power.
    """
    total = float(weights.sum())
    residual = np.where(weights > 0, values - float(np.sum(weights * values)) / total, 0.0)
    covariance, pairs, distance = _by_distance(weights * residual, weights, spacing_mm)
    step = min(spacing_mm)
    ring = np.rint(distance / step).astype(int)
    covariance_ring = np.asarray(np.bincount(ring, covariance), dtype=float)
    pairs_ring = np.asarray(np.bincount(ring, pairs), dtype=float)
    last = _last_correlated_ring(covariance_ring, pairs_ring, total)
    kept_covariance = float(covariance_ring[: last + 1].sum())
    kept_pairs = float(pairs_ring[: last + 1].sum())
    variance = kept_covariance / max(total**2 - kept_pairs, 1e-12 * total**2)
    rho2 = np.where(pairs > 0, covariance / np.where(pairs > 0, pairs, 1.0), 0.0) ** 2
    white = independent_doubt(values[weights > 0], weights[weights > 0])
    if last == 0:
        return white
    zero = covariance_ring[0] / pairs_ring[0]
    power = float(np.sum((rho2 * pairs)[ring <= last])) / zero**2
    # a mean of few correlated samples: never more certain than its zero-frequency noise allows
    floor = white.variance_of_mean * 1e-3
    return MeanDoubt(max(variance, floor), total**2 / power, last * step)


def _by_distance(
    signal: Floats, weights: Floats, spacing_mm: tuple[float, ...]
) -> tuple[Floats, Floats, Floats]:
    """Return autocorrelation of the signal, of the weights, and the lag's length, flattened."""
    size = [fft.next_fast_len(2 * n - 1, real=True) for n in signal.shape]
    both = np.stack([signal, weights])
    axes = tuple(range(1, both.ndim))
    power = np.abs(fft.rfftn(both, size, axes=axes)) ** 2
    auto = fft.irfftn(power, size, axes=axes)
    steps = [
        d * np.minimum(np.arange(n), n - np.arange(n))
        for d, n in zip(spacing_mm, size, strict=True)
    ]
    distance = np.sqrt(sum(s**2 for s in np.meshgrid(*steps, indexing="ij", sparse=True)))
    pairs = np.where(auto[1] > 0.5, auto[1], 0.0)
    return np.where(pairs > 0, auto[0], 0.0).ravel(), pairs.ravel(), distance.ravel()


def _last_correlated_ring(covariance: Floats, pairs: Floats, total: float) -> int:
    """Return the last ring whose mean correlation stands out of its own noise."""
    rho = np.divide(covariance, pairs, out=np.zeros_like(pairs), where=pairs > 0)
    rho /= rho[0] if rho[0] > 0 else 1.0
    power = 1.0  # sum of squared correlation over lags: pixels one independent sample costs
    last, quiet = 0, 0
    for k in range(1, len(rho)):
        if pairs[k] <= 0 or float(pairs[: k + 1].sum()) > 0.5 * total**2:
            break
        sigma = math.sqrt(2.0 * power / pairs[k])
        if abs(rho[k]) > 2.0 * sigma:
            last, quiet = k, 0
            power += float(rho[k] ** 2 * pairs[k] / total)
        else:
            quiet += 1
            if quiet == 2:
                break
    return last
