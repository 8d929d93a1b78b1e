"""The standard error of a region's mean from a noise power spectrum measured elsewhere."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from scipy import fft, ndimage

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.coverage import Coverage
from ct_measure_plugin.physics.radial import rings
from ct_measure_plugin.physics.results import Quantity
from ct_measure_plugin.physics.slice_spectrum import SliceSpectrum
from ct_measure_plugin.physics.spectrum_low import RINGS, continuation

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    from ct_measure_plugin.physics.noise_power import NoisePower

    Floats = NDArray[np.float64]

__all__ = ["standard_error_from_nps"]

#: Frequencies within the reciprocal of the region's extent, so that a sum over them is an integral.
FINENESS = 4


def standard_error_from_nps(
    coverage: Coverage | ArrayLike, noise: NoisePower | SliceSpectrum
) -> Quantity:
    """Return the standard error of a region's mean on one slice.

    Parameters
    ----------
    coverage : Coverage or array, shape (ny, nx)
        The region's weights, on the pixel grid on which the spectrum was measured.
    noise : NoisePower or SliceSpectrum
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
    ``Var(mean) = ∬ S(f) |W(f)|² df`` with W the transform of the weights over their sum [1]_. Below
    the lowest usable frequency S is continued as :func:`.spectrum_low.continuation` says.

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
    noise = SliceSpectrum.of(noise)
    usable = noise.radial.x >= noise.lowest_frequency.value - 1e-12
    x, y = noise.radial.x[usable], noise.radial.y[usable]
    share = np.zeros(len(y))
    if noise.radial.y_uncertainty is not None:
        share = noise.radial.y_uncertainty[usable] / np.where(y > 0, y, 1.0)
    power, radius, response = _on_a_fine_grid(weights, noise)
    lost = radius < noise.lowest_frequency.value - 0.5 * max(noise.spectrum.spacing)
    high = power * response
    variance = float(np.sum(high, where=~lost))
    spread = float(np.sum(high * np.interp(radius, x, share), where=~lost))
    low, low_spread = _low(x, y, share, radius[lost], response[lost])
    error = math.sqrt(max(variance + low, 0.0))
    spread = math.hypot(spread, low_spread)
    return Quantity(error, noise.sd.unit, spread / (2 * error) if error > 0 else 0.0)


def _on_a_fine_grid(weights: Floats, noise: SliceSpectrum) -> tuple[Floats, Floats, Floats]:
    """Return the spectrum, |f| and |W|² df over a half plane of finely spaced frequencies."""
    values, steps = noise.spectrum.values, noise.spectrum.spacing
    spacing = [1.0 / (n * s) for n, s in zip(values.shape, steps, strict=True)]
    ny, nx = (
        fft.next_fast_len(max(FINENESS * w, n), real=True)
        for w, n in zip(weights.shape, values.shape, strict=True)
    )
    fy, fx = fft.fftfreq(ny, spacing[0])[:, None], fft.rfftfreq(nx, spacing[1])[None, :]
    response = np.abs(fft.rfft2(weights, (ny, nx))) ** 2
    response /= ny * spacing[0] * nx * spacing[1] * float(weights.sum()) ** 2
    response[:, 1 : (nx + 1) // 2] *= 2.0  # the other half plane is the same
    power = _without_smear(noise)
    place = np.broadcast_arrays(fy / steps[0], fx / steps[1])
    fine = ndimage.map_coordinates(power, np.stack(place), order=1, mode="grid-wrap")
    return fine, np.hypot(fy, fx), response


def _without_smear(noise: SliceSpectrum) -> Floats:
    """Return the spectrum, frequency 0 first, with its smear divided out."""
    power: Floats = fft.ifftshift(noise.spectrum.values).copy()
    shape = (power.shape[0], power.shape[1])
    steps = noise.spectrum.spacing
    groups = rings(shape, (1.0 / (shape[0] * steps[0]), 1.0 / (shape[1] * steps[1])))
    if len(groups.bins) == len(noise.smear.y):
        ring = groups.labels >= 0
        power[ring] /= 1.0 + noise.smear.y[groups.labels[ring]]
    return power


def _low(x: Floats, y: Floats, share: Floats, below: Floats, gain: Floats) -> tuple[float, float]:
    """Return the variance from the lost frequencies and its uncertainty.

    That of the rings is carried through ring by ring; that of the form is the scatter of the
    forms about their mean.
    """
    forms = continuation(x, y, share)
    each = forms.each(below) @ gain
    found = float(forms.weights @ each)
    spread = float(forms.weights @ (each - found) ** 2)
    for k in range(min(len(y), RINGS)):
        moved = y * (1.0 + share * (np.arange(len(y)) == k))
        spread += (float(continuation(x, moved, share).mean(below) @ gain) - found) ** 2
    return found, math.sqrt(spread)
