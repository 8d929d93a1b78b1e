"""From pixels with their distances to an edge, straight or round, to the MTF across it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal, TypeAlias

import numpy as np

from ct_measure_plugin.physics.edge_bins import EdgeBins, bin_by_distance
from ct_measure_plugin.physics.edge_noise import NoiseSpectrum, bin_covariance
from ct_measure_plugin.physics.esf_fit import fit_esf
from ct_measure_plugin.physics.mtf_curve import (
    FREQUENCY_STEPS,
    Spread,
    conventional_mtf,
    width_at,
)
from ct_measure_plugin.physics.results import Curve, Quantity

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["EsfData", "Method", "Shape", "jacobian_doubt", "measure_esf"]

Method: TypeAlias = Literal["fitted", "conventional"]

#: Variance added to every bin, relative to the squared step: rounding, and what no model resolves.
TINY = 1e-12


@dataclass(frozen=True, slots=True, eq=False)
class EsfData:
    """What an edge spread function is measured from.

    Attributes
    ----------
    distance, value : ndarray, shape (n,)
        Signed distance from the edge, mm, and value of each pixel.
    sigma : float
        Width of the best Gaussian edge, mm.
    reach : (float, float)
        How far the data reach on the negative and on the positive side, mm.
    bin_width, gap : float
        Bin of the conventional route, and widest gap between samples, mm.
    contrast : float
        Step of the edge, roughly.
    pixel_mm : float
        The larger pixel spacing.
    spectrum : NoiseSpectrum
        Of the pixels about the edge.
    normals : ndarray
        Directions across the edge, radians.
    length : float
        Length of edge that the pixels lie along, mm.
    """

    distance: Floats
    value: Floats
    sigma: float
    reach: tuple[float, float]
    bin_width: float
    gap: float
    contrast: float
    pixel_mm: float
    spectrum: NoiseSpectrum
    normals: Floats
    length: float

    @property
    def fwhm(self) -> float:
        """FWHM of the best Gaussian edge, mm."""
        return 2.3548 * self.sigma

    @property
    def top(self) -> float:
        """Where the curve ends: beyond any kernel of this width, or where the samples end."""
        gap = max(self.gap, self.pixel_mm / 10)
        return min(1.3 / self.sigma, 0.5 / gap, 2.0 / self.pixel_mm)


@dataclass(frozen=True, slots=True, eq=False)
class Shape:
    """Edge and line spread function and what is read from them."""

    esf: Curve
    lsf: Curve
    width: Quantity
    overshoot: Quantity
    step: float
    shift: float = 0.0


def measure_esf(data: EsfData, method: Method, unit: str) -> tuple[Spread, Shape]:
    """Return the MTF across an edge and the edge's shape, by either method."""
    return _fitted(data, unit) if method == "fitted" else _conventional(data, unit)


def _fitted(data: EsfData, unit: str) -> tuple[Spread, Shape]:
    bins = bin_by_distance(
        data.distance,
        data.value,
        max(data.pixel_mm / 4, data.sigma / 8),
        half=min(float(np.abs(data.distance).max()), 40 * data.sigma),
    )
    covariance = bin_covariance(bins, data.spectrum, data.normals, data.length)
    covariance[np.diag_indices(len(covariance))] += TINY * data.contrast**2
    fit = fit_esf(bins, data.sigma, covariance)
    frequency = np.linspace(0, data.top, FREQUENCY_STEPS)
    mtf, doubt = fit.mtf(frequency)
    d = np.linspace(-6 * data.fwhm, 6 * data.fwhm, 361)
    esf, lsf = fit.esf(d), fit.lsf(d) / fit.contrast
    rise = float((esf - fit.gradient * d).max() - fit.level) / fit.contrast - 0.5
    shape = Shape(
        Curve(d, esf, None, "distance", "mm", "ESF", unit),
        Curve(d, lsf, None, "distance", "mm", "LSF", "mm⁻¹"),
        Quantity(width_at(d, lsf, 0.5), "mm"),
        Quantity(max(0.0, rise), ""),
        fit.contrast,
        fit.shift,
    )
    return Spread(frequency, mtf, doubt), shape


def _conventional(data: EsfData, unit: str) -> tuple[Spread, Shape]:
    width = data.bin_width
    half = min(max(5 * data.fwhm, 5.0), 0.95 * min(data.reach))
    bins = bin_by_distance(data.distance, data.value, width, half=half + 3 * width)
    middles, esf = bins.evenly(half + 2 * width)
    full = EdgeBins(
        np.rint(middles / width).astype(np.intp),
        np.interp(middles, bins.distance, bins.count),
        middles,
        np.zeros_like(middles),
        esf,
        width,
    )
    covariance = bin_covariance(full, data.spectrum, data.normals, data.length)
    frequency = np.linspace(0, min(data.top, 0.25 / width), FREQUENCY_STEPS)
    spread, lsf = conventional_mtf(middles, esf, covariance, half=half, frequency=frequency)
    edge = 0.6 * half
    low, high = esf[middles < -edge].mean(), esf[middles > edge].mean()
    step = float(high - low)
    doubt = np.sqrt(np.diag(covariance))
    shape = Shape(
        Curve(middles, esf, doubt, "distance", "mm", "ESF", unit),
        Curve(middles, lsf / step, None, "distance", "mm", "LSF", "mm⁻¹"),
        Quantity(width_at(middles, lsf / step, 0.5), "mm"),
        Quantity(max(0.0, float((esf.max() - high) / step)), ""),
        step,
    )
    return spread, shape


def jacobian_doubt(jacobian: Floats, spectrum: NoiseSpectrum) -> Floats:
    """Return the standard uncertainties of least-squares parameters in coloured noise.

    Parameters
    ----------
    jacobian : ndarray, shape (p, ny, nx)
        Derivatives of the pixels by each parameter.
    spectrum : NoiseSpectrum
        Of the pixels.

    Notes
    -----
    Each parameter is a weighted sum of the pixels; its variance is the sum of the noise power
    times the squared transform of the weights.
    """
    flat = jacobian.reshape(len(jacobian), -1)
    weights = np.linalg.solve(flat @ flat.T, flat).reshape(jacobian.shape)
    ny, nx = jacobian.shape[1:]
    dy, dx = spectrum.spacing_mm
    fy, fx = np.fft.fftfreq(ny, dy), np.fft.fftfreq(nx, dx)
    power = spectrum.at(np.hypot(fy[:, None], fx[None, :])) / (dy * dx)
    square = np.abs(np.fft.fft2(weights)) ** 2
    variance = (square * power).sum(axis=(1, 2)) / (ny * nx)
    found: Floats = np.sqrt(variance)
    return found
