"""From pixels with their distances to an edge, straight or round, to the MTF across it."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal, TypeAlias

import numpy as np

from ct_measure_plugin.physics.edge_bins import EdgeBins, bin_by_distance
from ct_measure_plugin.physics.edge_noise import NoiseSpectrum, bin_covariance
from ct_measure_plugin.physics.esf_fit import fit_esf
from ct_measure_plugin.physics.esf_shape import Shape, conventional_shape, fitted_shape
from ct_measure_plugin.physics.mtf_curve import (
    FREQUENCY_STEPS,
    Spread,
    conventional_mtf,
)
from ct_measure_plugin.physics.results import NotMeasured, Quantity

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["EsfData", "Method", "jacobian_doubt", "measure_esf", "noise_numbers"]

Method: TypeAlias = Literal["fitted", "conventional"]

#: Variance added to every bin, relative to the squared step: rounding, and what no model resolves.
TINY = 1e-12

#: Half-width in sigma of what the fit looks at; plateaus to 40 make f50 no better.
FAR = 24.0


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


def measure_esf(data: EsfData, method: Method, unit: str) -> tuple[Spread, Shape]:
    """Return the MTF across an edge and the edge's shape, by either method."""
    return _fitted(data, unit) if method == "fitted" else _conventional(data, unit)


def _fitted(data: EsfData, unit: str) -> tuple[Spread, Shape]:
    bins = bin_by_distance(
        data.distance,
        data.value,
        max(data.pixel_mm / 4, data.sigma / 8),
        half=min(float(np.abs(data.distance).max()), FAR * data.sigma),
    )
    covariance = bin_covariance(bins, data.spectrum, data.normals, data.length)
    covariance[np.diag_indices(len(covariance))] += TINY * data.contrast**2
    fit = fit_esf(bins, data.sigma, covariance)
    frequency = np.linspace(0, data.top, FREQUENCY_STEPS)
    mtf, doubt = fit.mtf(frequency)
    return Spread(frequency, mtf, doubt), fitted_shape(fit, data.fwhm, unit)


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
    averaged = bins.averaged(2 * data.fwhm)
    spread = conventional_mtf(
        middles, esf, covariance, half=half, frequency=frequency, averaged=averaged
    )
    shape = conventional_shape(middles, esf, covariance, half=half, fwhm=data.fwhm, unit=unit)
    return spread, shape


def jacobian_doubt(jacobian: Floats, spectrum: NoiseSpectrum, first: int | None = None) -> Floats:
    """Return the standard uncertainties of least-squares parameters in coloured noise.

    Parameters
    ----------
    jacobian : ndarray, shape (p, ny, nx)
        Derivatives of the pixels by each parameter.
    spectrum : NoiseSpectrum
        Of the pixels.
    first : int, optional
        How many of the parameters, from the first, are asked for; all by default.

    Notes
    -----
    Each parameter is a weighted sum of the pixels; its variance is the sum of the noise power
    times the squared transform of the weights.
    """
    flat = jacobian.reshape(len(jacobian), -1)
    inverse = np.linalg.inv(flat @ flat.T)[:first]
    weights: Floats = (inverse @ flat).reshape(len(inverse), *jacobian.shape[1:])
    found: Floats = np.sqrt(spectrum.variance_of_sums(weights))
    return found


def noise_numbers(noise: float, independent: float, contrast: Quantity) -> dict[str, object]:
    """Return contrast, noise and their ratio as the named Quantities of a result."""
    doubt = noise / math.sqrt(2 * max(independent - 10.0, 1.0))
    found: dict[str, object] = {
        "contrast": Quantity(abs(contrast.value), contrast.unit, contrast.uncertainty),
        "noise": Quantity(noise, contrast.unit, doubt),
    }
    if noise <= 0:
        return found | {"contrast_to_noise": NotMeasured("there is no noise", "none is needed")}
    ratio = abs(contrast.value) / noise
    shares = (contrast.uncertainty or 0.0) / abs(contrast.value), doubt / noise
    return found | {"contrast_to_noise": Quantity(ratio, "", ratio * math.hypot(*shares))}
