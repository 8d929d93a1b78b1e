"""The doubt of a region's mean from a noise power spectrum that was measured elsewhere."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.noise_correlation import (
    MeanDoubt,
    between_slices,
    doubt_of_mean,
    student_factor,
)
from ct_measure_plugin.physics.results import Caution, Quantity
from ct_measure_plugin.physics.standard_error import standard_error_from_nps

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.slice_spectrum import SliceSpectrum

    Floats = NDArray[np.float64]

__all__ = ["doubt_from_spectrum", "misfit", "unfit"]

#: Pixels count as equal if their sides differ by less than this share.
SAME_PIXELS = 2e-3

#: A region's SD counts as another noise's if it differs from the spectrum's by more than this
#: share and by more than three uncertainties (a choice).
SAME_NOISE = 0.15


def doubt_from_spectrum(
    values: Floats, weights: Floats, spacing_mm: tuple[float, ...], noise: SliceSpectrum
) -> MeanDoubt:
    """Return the doubt of a weighted mean under noise of a measured spectrum.

    Parameters
    ----------
    values, weights : ndarray, shape (ny, nx) or (nz, ny, nx)
        The values on their grid and the coverage, 0 outside the region.
    spacing_mm : tuple of float
        Step along each axis; in the plane that of the spectrum.
    noise : SliceSpectrum
        The spectrum of a slice, from the same material, kernel, dose and distance from the centre.

    Returns
    -------
    MeanDoubt
        The variance of the mean is the spectrum's; how many independent samples the region's own
        SD rests on is judged from the region, as without a spectrum.

    Notes
    -----
    A slice's mean varies by ``∬ S |W|² df`` (see :mod:`.standard_error`). Over several slices the
    variances add, each by the square of its share of the weight, and the correlation between
    slices, taken from equal pixels, raises the sum.

    Examples
    --------
    >>> from ct_measure_plugin.physics import noise_power
    >>> from ct_measure_plugin.physics.slice_spectrum import SliceSpectrum
    >>> rng = np.random.default_rng(1)
    >>> noise = noise_power(rng.normal(0, 10, (400, 32, 32)), spacing_mm=(0.5, 0.5))
    >>> image, whole = rng.normal(0, 10, (20, 20)), np.ones((20, 20))
    >>> found = doubt_from_spectrum(image, whole, (0.5, 0.5), SliceSpectrum.of(noise))
    >>> bool(abs(found.variance_of_mean**0.5 - 10 / 20) < 0.02)  # σ/√n
    True
    """
    own = doubt_of_mean(values, weights, spacing_mm)
    if own.variance_of_mean == 0:  # equal values: there is no noise to have a spectrum
        return own
    stack = (values if values.ndim == 3 else values[None]).astype(float)
    cover = weights if weights.ndim == 3 else weights[None]
    total = float(cover.sum())
    known: dict[bytes, Quantity] = {}
    variance, relative = 0.0, 0.0
    for plane in cover:
        share = float(plane.sum()) / total
        if share == 0:
            continue
        name = plane.tobytes()
        if name not in known:
            known[name] = standard_error_from_nps(plane, noise)
        error = known[name]
        variance += (share * error.value) ** 2
        relative = max(relative, (error.uncertainty or 0.0) / max(error.value, 1e-300))
    middle = float(np.sum(cover * stack)) / total
    signal = cover * np.where(cover > 0, stack - middle, 0.0)
    slices, _ = between_slices(signal, cover)
    freedom = 1.0 / (2.0 * max(relative, 1e-6) ** 2)
    widened = student_factor(freedom) ** 2
    return replace(own, variance_of_mean=variance * slices * widened, freedom=freedom)


def unfit(noise: SliceSpectrum, spacing_mm: tuple[float, ...], unit: str) -> Caution | None:
    """Tell why a spectrum cannot serve for pixels of this size and unit; None if it can."""
    there = noise.spacing_mm
    here = spacing_mm[-2:]
    if len(spacing_mm) > 1 and noise.sd.unit == unit:
        if all(abs(a / b - 1) < SAME_PIXELS for a, b in zip(there, here, strict=True)):
            return None
        why = "of {} × {} mm, these are of {} × {} mm".format(
            *(f"{s:.4g}" for s in (*there, *here))
        )
    else:
        why = f"in {noise.sd.unit or 'no unit'}, these are in {unit or 'no unit'}"
    return Caution(
        "spectrum-not-used",
        f"The noise spectrum was measured on pixels {why}; the standard error is from the region's"
        " own pixels instead.",
        "Measure the spectrum in this series.",
    )


def misfit(noise: SliceSpectrum, sd: Quantity) -> Caution | None:
    """Caution if a region's SD is not that of the spectrum."""
    off = abs(sd.value - noise.sd.value)
    known = math.hypot(sd.uncertainty or 0.0, noise.sd.uncertainty or 0.0)
    if off <= 3 * known or off <= SAME_NOISE * noise.sd.value:
        return None
    return Caution(
        "spectrum-of-other-noise",
        f"The region's SD is {sd.value:.3g} {sd.unit}, the noise spectrum's"
        f" {noise.sd.value:.3g} {sd.unit}: they differ by more than chance.",
        "Take the spectrum from the same material, dose, kernel and distance from the centre.",
    )
