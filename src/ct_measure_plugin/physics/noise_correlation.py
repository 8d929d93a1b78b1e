"""How far a region's mean can be trusted when neighbouring pixels share their noise.

The variance of a weighted mean is ``sum_lag C(lag) R(lag) / W**2``, with `C` the autocovariance of
the noise, `R` the autocorrelation of the weights and `W` their sum: the same integral as
``∬ S |W(f)|² df`` over the noise power spectrum `S`. Here `S` is judged from the region itself:
every spectrum of a library is weighed by how well it explains the region's periodogram, and the
variances that the spectra give are averaged with these weights. What the region cannot decide
widens the standard error by the factor of Student's distribution. The periodogram of a region up to
a few thousand pixels says too little where it matters, at the lowest frequencies;
:mod:`ct_measure_plugin.physics.small_regions` takes its place there.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import cache
from typing import TYPE_CHECKING

import numpy as np
from scipy import fft, stats

from ct_measure_plugin.physics.noise_spectra import Geometry, geometry, library
from ct_measure_plugin.physics.small_regions import doubt_of_few

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = [
    "MeanDoubt",
    "between_slices",
    "doubt_of_mean",
    "doubt_of_samples",
    "independent_doubt",
    "student_factor",
]

#: A known white floor, in units of the region's variance, added to data and model alike: it keeps
#: frequencies at which there is next to no noise from outvoting those that decide the mean.
FLOOR = 0.05

#: Independent values of the periodogram that may vote; in larger regions the highest frequencies
#: lose their vote first, since no spectrum of the library fits them to the last percent.
VOTES = 600.0

#: Coverage of a slice, in pixels, up to which exact likelihoods of blocks of pixels are used, and
#: from which the periodogram is: in between one passes into the other, so that nothing jumps. A
#: periodogram of fewer has too few independent values at the frequencies that decide the mean.
SMALL, LARGE = 2400.0, 4800.0


@dataclass(frozen=True, slots=True)
class MeanDoubt:
    """What the noise of a region leaves certain.

    Attributes
    ----------
    variance_of_mean : float
        Square of the standard error of the weighted mean, in squared units of the values. The
        standard error is enlarged by t(0.975, freedom)/1.96, so that ±1.96 of it hold the mean 95 %
        of the time although it is itself an estimate (JCGM 100:2008, G.3).
    power_samples : float
        Number of independent samples as the sample variance sees them,
        ``W**2 / sum_lag rho(lag)**2 R(lag)``: twice the inverse squared relative uncertainty of
        the variance.
    reach : float
        Distance to which the noise is correlated (its coefficient over 0.1 in size), in the unit of
        the spacing; 0 if the pixels are independent.
    freedom : float
        Degrees of freedom of the variance of the mean.
    """

    variance_of_mean: float
    power_samples: float
    reach: float
    freedom: float


@cache
def _student_table() -> tuple[Floats, Floats]:
    freedom = np.geomspace(2.0, 1e5, 500)
    factor: Floats = np.asarray(stats.t.ppf(0.975, freedom) / stats.norm.ppf(0.975), float)
    return np.log(freedom), factor


def student_factor(freedom: float) -> float:
    """Return t(0.975, freedom)/1.96; freedom below 2 counts as 2."""
    return float(np.interp(math.log(freedom), *_student_table()))


def independent_doubt(values: Floats, weights: Floats) -> MeanDoubt:
    """Return the doubt of a weighted mean of independent samples.

    >>> doubt = independent_doubt(np.arange(2000.0), np.ones(2000))
    >>> round(float(doubt.variance_of_mean / (np.var(np.arange(2000.0), ddof=1) / 2000)), 2)
    1.0
    """
    total = float(weights.sum())
    squares = float(np.sum(weights**2))
    residual = values - float(np.sum(weights * values)) / total
    spread = float(np.sum((weights * residual) ** 2))
    samples = total**2 / squares
    freedom = max(samples - 1, 1.0)
    variance = spread / (total**2 - squares)
    return MeanDoubt(variance * student_factor(freedom) ** 2, samples, 0.0, freedom)


def doubt_of_samples(variance: float, count: float) -> MeanDoubt:
    """Return the doubt of the plain mean of so many independent samples of a sample variance.

    >>> doubt_of_samples(100.0, 2000.0).power_samples
    2000.0
    """
    freedom = max(count - 1, 1.0)
    return MeanDoubt(variance / count * student_factor(freedom) ** 2, count, 0.0, freedom)


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
    the mean, the periodogram of ``w r``, averaged over directions, is compared with what each
    spectrum of the library makes one expect: its autocovariance times the autocorrelation of the
    weights, less the variance of the mean itself, transformed alike (the expectation of a debiased
    Whittle likelihood [1]_). Each value is taken as gamma-distributed with as many degrees of
    freedom as the region has independent ones in that ring. The weights of the spectra times their
    prior give the mean and the variance of ln Var(mean); the degrees of freedom are 2 over the
    latter. Between slices the correlation is taken from equal pixels, followed until it falls into
    its own noise.

    References
    ----------
    .. [1] Sykulski, Olhede, Guillaumin, Lilly, Early 2019, "The debiased Whittle likelihood",
       Biometrika 106, 251-266 (cited from memory).
    """
    cover = weights if weights.ndim == 3 else weights[None]
    # what does not count may be anything, NaN too
    stack = np.where(cover > 0, values if values.ndim == 3 else values[None], 0.0).astype(float)
    total = float(cover.sum())
    inside = weights > 0
    white = independent_doubt(values[inside], weights[inside])
    if np.ptp(values[inside]) == 0:  # equal values: rounding must not invent a spread
        return replace(white, variance_of_mean=0.0)
    if white.variance_of_mean == 0:
        return white
    residual = np.where(cover > 0, stack - float(np.sum(cover * stack)) / total, 0.0)
    signal = cover * residual
    shared = between_slices(signal, cover)
    finest = min(spacing_mm[-2:])
    part = math.log(total / np.count_nonzero(cover.any(axis=(1, 2))) / SMALL)
    part = min(max(part / math.log(LARGE / SMALL), 0.0), 1.0)
    few = many = None
    if part < 1:
        stretch = (spacing_mm[-2] / finest, spacing_mm[-1] / finest)
        small = doubt_of_few(residual, cover, stretch, shared)
        if small is not None:
            few = MeanDoubt(*small[:2], small.reach * finest, small.freedom)
    if part > 0 or few is None:
        many = _doubt_of_many(signal, cover, spacing_mm, white.power_samples, shared)
    if few is None or many is None:
        return few or many or white
    return _between(few, many, part)


def _between(few: MeanDoubt, many: MeanDoubt, part: float) -> MeanDoubt:
    """Return the doubt so far from one to the other, on a logarithmic scale."""

    def mixed(a: float, b: float) -> float:
        return math.exp((1 - part) * math.log(a) + part * math.log(b))

    return MeanDoubt(
        mixed(few.variance_of_mean, many.variance_of_mean),
        mixed(few.power_samples, many.power_samples),
        few.reach * (1 - part) + many.reach * part,
        mixed(few.freedom, many.freedom),
    )


def _doubt_of_many(
    signal: Floats,
    cover: Floats,
    spacing_mm: tuple[float, ...],
    samples: float,
    shared: tuple[float, float],
) -> MeanDoubt:
    """Return what the periodogram says; `samples` if the pixels were independent."""
    total = float(cover.sum())
    slices, slice_power = shared
    seen = _observe(signal, cover, spacing_mm[-2:])
    dof = samples / slice_power
    weight, variance, level = _weigh(seen, dof, slices / total**2)
    log_variance = np.log(variance)
    middle = float(weight @ log_variance)
    spread = float(weight @ (log_variance - middle) ** 2) + 2.0 / min(dof, VOTES)
    freedom = 2.0 / spread
    power, reach = _correlation(seen, weight * level, total**2)
    return MeanDoubt(
        math.exp(middle) * student_factor(freedom) ** 2,
        max(power / slice_power, 1.0),
        reach * min(spacing_mm[-2:]),
        freedom,
    )


@dataclass(frozen=True, slots=True, eq=False)
class _Seen:
    """A region's autocovariance sums and pair counts by length of lag."""

    geometry: Geometry
    covariance: Floats
    pairs: Floats


def _observe(signal: Floats, cover: Floats, steps: tuple[float, ...]) -> _Seen:
    finest = min(steps)
    stretch = (steps[0] / finest, steps[1] / finest)
    area = float(cover.sum()) / len(cover) * stretch[0] * stretch[1]
    radius = max(round(2 * math.sqrt(area / math.pi)), 2) / 2
    shape = (signal.shape[1], signal.shape[2])
    grid = geometry(shape, radius, (round(stretch[0], 6), round(stretch[1], 6)))
    power = np.zeros((2, grid.size[0], grid.size[1] // 2 + 1))
    for plane, mask in zip(signal, cover, strict=True):
        spectrum = fft.rfft2(np.stack([plane, mask]), grid.size)
        power += spectrum.real**2 + spectrum.imag**2
    auto = fft.irfft2(power, grid.size)[:, :, : power.shape[2]]
    return _Seen(grid, grid.by_lag(auto[0]), np.maximum(grid.by_lag(auto[1]), 0.0))


def _weigh(seen: _Seen, samples: float, scale: float) -> tuple[Floats, Floats, Floats]:
    """Return weight, variance of the mean and level of every spectrum, white noise first."""
    grid, shelf = seen.geometry, library()
    window = grid.wave @ seen.pairs
    few = grid.covariance * seen.pairs
    own = few.sum(axis=1) * scale
    few_expected = few @ grid.wave.T - own[:, None] * window
    expected = np.empty((len(shelf.log_prior), len(window)))
    unit_variance = np.empty(len(shelf.log_prior))
    unit_variance[0] = seen.pairs[0] * scale
    expected[0] = seen.pairs[0] - unit_variance[0] * window
    unit_variance[1:] = np.maximum(shelf.coefficients @ own, 1e-12 * unit_variance[0])
    np.matmul(shelf.coefficients, few_expected, out=expected[1:])
    np.maximum(expected, 0.0, out=expected)
    expected += FLOOR * seen.pairs[0]
    periodogram = grid.wave @ seen.covariance + FLOOR * seen.covariance[0]
    periodogram = np.maximum(periodogram, 0.01 * FLOOR * seen.covariance[0])
    votes = 2 * math.pi * grid.frequency * grid.step * samples
    votes = votes / (1 + (grid.frequency / math.sqrt(VOTES / math.pi / samples)) ** 4)
    all_votes = float(votes.sum())
    level = (periodogram / expected) @ votes / all_votes
    log_weight = shelf.log_prior - all_votes / 2 * np.log(level) - np.log(expected) @ votes / 2
    weight = np.exp(log_weight - log_weight.max())
    return weight / weight.sum(), level * unit_variance, level


def _correlation(seen: _Seen, share: Floats, squared_total: float) -> tuple[float, float]:
    """Return the power samples and the reach (in pixels) of the spectra's mean."""
    model = (share[1:] @ library().coefficients) @ seen.geometry.covariance
    model[0] += share[0]
    rho = model / model[0]
    power = squared_total / float(np.sum(rho**2 * seen.pairs))
    correlated = seen.geometry.lag[np.abs(rho) > 0.1]
    return power, float(correlated.max(initial=0.0))


def between_slices(signal: Floats, cover: Floats) -> tuple[float, float]:
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
