"""Width, height, radial profile and directions of a wire's spot."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.mtf_curve import level_frequency
from ct_measure_plugin.physics.results import Curve, Quantity
from ct_measure_plugin.physics.wire_trace import CORE as FITTED

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.edge_noise import NoiseSpectrum
    from ct_measure_plugin.physics.wire_trace import WireTrace
    from ct_measure_plugin.physics.wire_transform import Section, Sums

    Floats = NDArray[np.float64]

__all__ = ["by_direction", "place_doubts", "radial_psf", "spot_width"]

#: Directions in degrees at which f50 is given.
DIRECTIONS = np.arange(0.0, 180.0, 15.0)

#: Powers of r² that describe the spot's core, and how far it reaches in FWHM.
POWERS, CORE = 5, 1.0


def spot_width(
    sections: list[Section], fwhm: float, spectrum: NoiseSpectrum, slices: float
) -> tuple[Quantity, Quantity]:
    """Return full width at half maximum in mm and height of the spot.

    From an even polynomial in the radius fitted to the pixels of the core; `slices` is the number
    of independent ones.
    """
    radius = np.concatenate([s.radius[s.radius < CORE * fwhm] for s in sections])
    value = np.concatenate([s.value[s.radius < CORE * fwhm] for s in sections])
    columns = _even(radius / fwhm)
    inverse = np.linalg.pinv(columns)
    mix = inverse @ value
    r = np.linspace(0, CORE * fwhm, 801)
    curve = _even(r / fwhm) @ mix
    height = float(mix[0])
    below = np.flatnonzero(curve / height < 0.5)
    i = int(below[0]) if len(below) else len(r) - 1
    slope = float(curve[i] - curve[i - 1]) / float(r[1])
    half = float(r[i - 1]) + (height / 2 - float(curve[i - 1])) / slope
    # how height and half-width answer to the polynomial's coefficients
    rows = np.zeros((2, POWERS))
    rows[0, 0] = 1.0
    rows[1] = -_even(np.array([half / fwhm]))[0] / slope
    rows[1, 0] += 0.5 / slope
    doubts = _doubts(rows, sections, fwhm, spectrum, slices)
    return Quantity(2 * half, "mm", 2 * float(doubts[1])), Quantity(height, "", float(doubts[0]))


def _doubts(
    rows: Floats,
    sections: list[Section],
    fwhm: float,
    spectrum: NoiseSpectrum,
    slices: float,
) -> Floats:
    """Return the standard uncertainties of sums of coefficients, as if of the middle slice."""
    section = sections[len(sections) // 2]
    core = section.radius < CORE * fwhm
    weights = np.zeros((len(rows), *core.shape))
    weights[:, core] = rows @ np.linalg.pinv(_even(section.radius[core] / fwhm), rcond=1e-6)
    found: Floats = np.sqrt(spectrum.variance_of_sums(section.effective(weights)) / slices)
    return found


def place_doubts(
    section: Section, trace: WireTrace, spectrum: NoiseSpectrum, slices: float
) -> tuple[float, float]:
    """Return the standard uncertainties of the wire's place and of its shift from slice to slice.

    Least squares of a Gaussian in the background's noise: on one slice the place is a sum of the
    pixels, weighted by the Gaussian's derivative.
    """
    height = float(np.median(trace.heights))
    near = section.radius <= FITTED * trace.sigma
    spot = height * np.exp(-0.5 * (section.radius / trace.sigma) ** 2) * near / trace.sigma**2
    columns = np.stack([spot * section.down, spot * section.right])
    weights = columns / np.sum(columns**2, axis=(1, 2))[:, None, None]
    one = math.sqrt(float(spectrum.variance_of_sums(weights).max()))
    n = len(trace.centers)
    index = np.arange(n) - (n - 1) / 2
    along = one / math.sqrt(float(index @ index)) * math.sqrt(n / slices) if n > 1 else 0.0
    return one / math.sqrt(slices), along


def _even(x: Floats) -> Floats:
    found: Floats = np.stack([x ** (2 * k) for k in range(POWERS)], axis=1)
    return found


def radial_psf(sections: list[Section], height: float, fwhm: float) -> Curve:
    """Return the mean of the pixels in rings about the wire, relative to its height."""
    radius = np.concatenate([s.radius[s.taper > 0] for s in sections])
    value = np.concatenate([s.value[s.taper > 0] for s in sections]) / height
    ring = np.floor(radius / (fwhm / 8)).astype(np.intp)
    count = np.bincount(ring)
    used = count > 0
    mean = np.bincount(ring, value)[used] / count[used]
    square = np.bincount(ring, value**2)[used] / count[used] - mean**2
    # a ring of one pixel tells nothing of its scatter: it borrows the largest ring's
    many = count[used] > 1
    scatter = np.where(many, square, square[many].max() if many.any() else 0.0)
    doubt = np.sqrt(np.maximum(scatter, 0.0) / np.maximum(count[used] - 1, 1))
    middle = np.bincount(ring, radius)[used] / count[used]
    return Curve(middle, mean, doubt, "radius", "mm", "PSF", "")


def by_direction(sums: Sums, frequency: Floats, own: Floats, worse: float) -> Curve:
    """Return f50 by direction; directions in which it is not reached are left out.

    `own` is the object's own transfer, and `worse` the factor on uncertainties of slices that are
    not independent.
    """
    found = []
    for angle in DIRECTIONS.tolist():
        mtf = sums.mtf(frequency, angle)
        at = level_frequency(frequency, mtf / own, None, 0.5)
        if not isinstance(at, Quantity):
            continue
        place = np.array([at.value])
        doubt = worse * sums.doubt(place, np.interp(place, frequency, mtf), angle)
        near = np.interp([0.95 * at.value, 1.05 * at.value], frequency, mtf / own)
        slope = float(near[0] - near[1]) / (0.1 * at.value)
        if slope > 0:
            of_level = float(doubt[0]) / float(np.interp(at.value, frequency, own))
            found.append((angle, at.value, of_level / slope))
    table = np.array(found, dtype=float).reshape(-1, 3)
    return Curve(table[:, 0], table[:, 1], table[:, 2], "direction", "°", "f50", "mm⁻¹")
