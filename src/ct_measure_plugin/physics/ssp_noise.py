"""Noise of readings taken slice by slice: within a slice, and from one slice to the next."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
from scipy import linalg

from ct_measure_plugin.physics.edge_noise import (
    NoiseSpectrum,
    bin_autocovariance,
    residual_spectrum,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]
    Flags = NDArray[np.bool_]

__all__ = [
    "clear_mean",
    "climb_covariance",
    "freedom",
    "mean_spectrum",
    "positive",
    "slice_correlation",
]

#: Least correlation that is taken for one, and least eigenvalue of a covariance, as a share of the
#: largest.
LEAST_RHO, LEAST_SHARE = 0.1, 1e-3

#: Pixels of a slice that tell its noise, at least.
LEAST_PIXELS = 16


def clear_mean(values: Floats) -> float:
    """Return the mean of values but for those that stand far out."""
    away = np.abs(values - np.median(values))
    return float(values[away <= 4 * 1.4826 * np.median(away)].mean())


def mean_spectrum(
    residuals: Floats, covers: Flags, spacing_mm: tuple[float, float]
) -> NoiseSpectrum:
    """Return the noise spectrum of slices, shape (nz, ny, nx), where they show nothing else."""
    parts = [
        residual_spectrum(plane * cover, spacing_mm, cover.astype(float))
        for plane, cover in zip(residuals, covers, strict=True)
        if int(cover.sum()) >= LEAST_PIXELS
    ]
    if not parts:
        return residual_spectrum(residuals[0], spacing_mm)
    return replace(parts[0], power=np.mean([part.power for part in parts], axis=0))


def slice_correlation(residuals: Floats, covers: Flags) -> Floats:
    """Return the correlation of slices 0, 1, 2 … apart, (nz,), as far as it stands out from 0.

    >>> noise = np.random.default_rng(1).normal(size=(9, 30, 30))
    >>> both = (noise[1:] + noise[:-1]) / np.sqrt(2)
    >>> slice_correlation(both, np.ones(both.shape, bool))[:3].round(1).tolist()
    [1.0, 0.5, 0.0]
    """
    found = np.zeros(len(residuals))
    found[0] = 1.0
    for k in range(1, len(residuals)):
        both = covers[:-k] & covers[k:]
        a, b = residuals[:-k][both], residuals[k:][both]
        scale = math.sqrt(float(a @ a) * float(b @ b))
        rho = float(a @ b) / scale if scale > 0 else 0.0
        # neighbouring pixels are not independent: perhaps one in four is
        if rho < max(LEAST_RHO, 8 / math.sqrt(max(len(a), 1))):
            break
        found[k] = rho
    return found


def freedom(spectrum: NoiseSpectrum, covers: Flags) -> float:
    """Return how many independent pixels told the noise, at least 1."""
    if not spectrum.power.any():
        return 1.0
    return max(spectrum.independent(covers.shape) * float(covers.mean()) * len(covers), 1.0)


def positive(covariance: Floats) -> Floats:
    """Return the nearest matrix whose eigenvalues stand clear of 0."""
    values, vectors = linalg.eigh(covariance)
    found: Floats = (vectors * np.maximum(values, LEAST_SHARE * values[-1])) @ vectors.T
    return found


def climb_covariance(
    z: Floats,
    count: Floats,
    spectrum: NoiseSpectrum,
    correlation: Floats,
    *,
    length: float,
    gap: float,
    tangent: float,
    direction: float,
) -> Floats:
    """Return the covariance of bins of a ramp's height, shape (n, n).

    Parameters
    ----------
    z, count : ndarray, shape (n,)
        Heights of the bins, mm, and how many pixels are in each.
    spectrum : NoiseSpectrum
        Of the pixels.
    correlation : ndarray, shape (nz,)
        Of slices by how many they are apart.
    length : float
        Across the climb over which pixels are averaged, mm.
    gap, tangent : float
        Distance between slices and tangent of the ramp's angle.
    direction : float
        Of the climb, radians from +x towards +y.

    Notes
    -----
    A pixel at the same place d slices further on lies ``d gap`` lower, so noise that slices share
    correlates heights which differ by so much.
    """
    pixel = min(spectrum.spacing_mm)
    width = pixel / 2
    away = np.subtract.outer(z, z)
    lags = int(float(np.ptp(z)) / tangent / width) + 2
    lags = max(lags, int(len(correlation) * gap / tangent / width) + 2)
    own = bin_autocovariance(spectrum, np.array([direction]), length=length, width=width, lags=lags)
    total = np.zeros_like(away)
    for d in range(1 - len(correlation), len(correlation)):
        rho = float(correlation[abs(d)])
        if rho > 0:
            lag = np.abs(away + d * gap) / tangent / width
            total += rho * np.interp(lag, np.arange(lags), own, right=0.0)
    dy, dx = spectrum.spacing_mm
    share = np.sqrt(length * width / (dy * dx) / count)
    return positive(total * share[:, None] * share)
