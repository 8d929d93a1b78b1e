"""The standard error of a region's mean from a noise power spectrum measured elsewhere."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from scipy import fft

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.coverage import Coverage
from ct_measure_plugin.physics.radial import frequencies, rings
from ct_measure_plugin.physics.results import Quantity

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    from ct_measure_plugin.physics.noise_power import NoisePower

    Floats = NDArray[np.float64]

__all__ = ["standard_error_from_nps"]


def standard_error_from_nps(coverage: Coverage | ArrayLike, noise: NoisePower) -> Quantity:
    """Return the standard error of a region's mean on one slice.

    Parameters
    ----------
    coverage : Coverage or array, shape (ny, nx)
        The region's weights, on the pixel grid on which the spectrum was measured.
    noise : NoisePower
        The spectrum of patches on one slice, from the same material and distance from the centre.

    Returns
    -------
    Quantity
        In the spectrum's unit, with its own standard uncertainty from that of the spectrum.

    Raises
    ------
    ArgumentError
        If the spectrum is that of deep patches, or the weights are not those of one slice.

    Notes
    -----
    Var(mean) = ∬ S(f) |W(f)|² df with W the transform of the weights over their sum [1]_, computed
    as the sum of autocovariance times the weights' autocorrelation. Below the lowest usable
    frequency S is continued by the straight line through the first two usable rings.

    Examples
    --------
    >>> from ct_measure_plugin.physics import noise_power
    >>> patches = np.random.default_rng(1).normal(0, 10, (400, 32, 32))
    >>> noise = noise_power(patches, spacing_mm=(0.5, 0.5))
    >>> error = standard_error_from_nps(np.ones((20, 20)), noise)
    >>> bool(abs(error.value - 10 / 20) < 0.02)  # σ/√n
    True

    References
    ----------
    .. [1] K. M. Hanson, Med. Phys. 6 (1979) 441.
    """
    weights = np.asarray(
        coverage.weights if isinstance(coverage, Coverage) else coverage, dtype=float
    )
    if weights.ndim != 2 or not weights.sum() > 0:
        raise ArgumentError("coverage", "must hold the weights of one slice", weights.shape)
    if noise.axial is not None:
        raise ArgumentError("noise", "must come from patches on one slice", "deep patches")
    shape = noise.spectrum.values.shape
    ny, nx = int(shape[0]), int(shape[1])
    steps = noise.spectrum.spacing
    spacing = 1.0 / (ny * steps[0]), 1.0 / (nx * steps[1])
    power, share = _completed(noise, (ny, nx), spacing)
    pairs = _pairs(weights, (ny, nx))
    response = fft.fft2(pairs).real  # |W|² ΣW², smoothed to the spectrum's own resolution
    scale = steps[0] * steps[1] / float(weights.sum()) ** 2
    variance = max(float(np.sum(power * response)) * scale, 0.0)
    doubt = float(np.sum(power * np.abs(response) * share)) * scale
    error = math.sqrt(variance)
    return Quantity(error, noise.sd.unit, doubt / (2 * error) if error > 0 else 0.0)


def _completed(
    noise: NoisePower, shape: tuple[int, int], spacing: tuple[float, float]
) -> tuple[Floats, Floats]:
    """Return the spectrum with its lost bins filled, and each bin's relative uncertainty."""
    power = fft.ifftshift(noise.spectrum.values).copy()
    fy, fx = frequencies(shape, spacing)
    radius = np.hypot(fy[:, None], fx[None, :])
    x, y = noise.radial.x, noise.radial.y
    usable = x >= noise.lowest_frequency.value - 1e-12
    relative = np.zeros(len(y))
    if noise.radial.y_uncertainty is not None:
        relative = noise.radial.y_uncertainty / np.where(y > 0, y, 1.0)
    xs, ys = x[usable], y[usable]
    slope = (ys[1] - ys[0]) / (xs[1] - xs[0]) if len(xs) > 1 else 0.0
    lost = radius < xs[0] - 0.5 * max(1.0 / (n * d) for n, d in zip(shape, spacing, strict=True))
    power[lost] = np.maximum(ys[0] + slope * (radius[lost] - xs[0]), 0.0)
    # the window's smear is divided out of the two-dimensional spectrum as it is out of the rings
    groups = rings(shape, spacing)
    if len(groups.bins) == len(noise.smear.y):
        ring = (groups.labels >= 0) & ~lost
        power[ring] /= 1.0 + noise.smear.y[groups.labels[ring]]
    share = np.interp(radius, xs, relative[usable])
    return power, share


def _pairs(weights: Floats, shape: tuple[int, int]) -> Floats:
    """Return the weights' autocorrelation at the lags a patch holds, in the transform's order."""
    size = [
        fft.next_fast_len(w + max(w, n), real=True)
        for w, n in zip(weights.shape, shape, strict=True)
    ]
    auto = fft.irfft2(np.abs(fft.rfft2(weights, size)) ** 2, size)
    lags = [np.rint(fft.fftfreq(n, 1.0 / n)).astype(int) for n in shape]
    found: Floats = auto[np.ix_(*lags)]
    return found
