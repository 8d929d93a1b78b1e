"""What is read from a sampled slice profile besides its widths."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
from scipy import interpolate

from ct_measure_plugin.physics.mtf_curve import FREQUENCY_STEPS, Spread, curve_numbers
from ct_measure_plugin.physics.profile_widths import Ends, Peak, ends_of
from ct_measure_plugin.physics.results import Quantity
from ct_measure_plugin.physics.ssp_blur import Blur, blur_transfer
from ct_measure_plugin.physics.ssp_samples import SspSamples

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.results import Caution

    Floats = NDArray[np.float64]

#: Difference of two interpolations, relative to the height, that tells corners.
SHARP = 0.012

__all__ = ["along_z", "area_numbers", "between_samples", "profile_ends"]

#: The profile is transformed within this many FWHM about its middle.
REACH = 3.0

#: Points between samples on which the profile is drawn and its widths are read.
FINE = 10

#: Independent points that stand for a noise known from many pixels.
KNOWN = 50.0


def profile_ends(fine: SspSamples, half: Peak, step: float) -> Ends:
    """Return the ends of a profile from all that lies beyond 1.5 FWHM of its middle.

    A few slices on either side tell their noise badly; the pixels around a bead tell it well.
    """
    length = float(fine.z[-1] - fine.z[0])
    room = min(half.middle.value - float(fine.z[0]), float(fine.z[-1]) - half.middle.value)
    share = (room - 1.5 * half.width.value) / length
    share = min(max(share, 0.05), 0.4)
    found = ends_of(fine.z - fine.z[0], fine.value, share, step)
    if fine.noise is None:
        return found
    independent = max(share * length / step, 1.0)
    doubt = fine.noise * math.sqrt(math.pi / 2 / independent)
    return replace(found, noise=fine.noise, doubt=doubt, correlation=step, freedom=KNOWN)


def between_samples(samples: SspSamples) -> SspSamples:
    """Return a profile between its samples.

    By a cubic spline; where that differs from modified Akima interpolation by more than a share
    `SHARP` of the height, the profile has corners at which a spline overshoots, and Akima's is
    taken.
    """
    z = np.linspace(samples.z[0], samples.z[-1], FINE * (len(samples.z) - 1) + 1)
    smooth = interpolate.CubicSpline(samples.z, samples.value)(z)
    careful = interpolate.Akima1DInterpolator(samples.z, samples.value, method="makima")(z)
    sharp = float(np.abs(smooth - careful).max()) > SHARP * float(np.ptp(samples.value))
    value = np.asarray(careful if sharp else smooth, dtype=np.float64)
    return replace(samples, z=z, value=value)


def area_numbers(fine: SspSamples, half: Peak, ends: Ends) -> dict[str, object]:
    """Return the equivalent width and the share of the area outside one FWHM of the middle."""
    base = (ends.low + ends.high) / 2
    step = float(fine.z[1] - fine.z[0])
    away = np.abs(fine.z - half.middle.value)
    reach = REACH * half.width.value
    value = (fine.value - base) / half.height.value
    near = away <= reach
    area = float(value[near].sum()) * step
    beyond = near & (away > half.width.value)
    outside = float(value[beyond].sum()) * step / area
    span = float(near.sum()) * step
    noise = ends.noise / abs(half.height.value)
    floor = ends.doubt / math.sqrt(2) / abs(half.height.value)
    doubt = math.hypot(noise * math.sqrt(span * ends.correlation), floor * span)
    own = (half.height.uncertainty or 0.0) / abs(half.height.value)
    share = span - 2 * half.width.value
    tail = math.hypot(noise * math.sqrt(max(share, 0.0) * ends.correlation), floor * share)
    return {
        "equivalent_width": Quantity(area, "mm", math.hypot(doubt, own * area)),
        "outside": Quantity(outside, "", tail / area),
    }


def along_z(
    fine: SspSamples,
    half: Peak,
    ends: Ends,
    blur: Blur,
    levels: tuple[float, ...],
    step: float,
) -> tuple[dict[str, object], list[Caution]]:
    """Return the numbers of the MTF along z.

    The transform of what was sampled: samples, not what was drawn between them.
    """
    base = (ends.low + ends.high) / 2
    every = max(1, round(step / float(fine.z[1] - fine.z[0])))
    z, value = fine.z[::every], fine.value[::every] - base
    used = np.abs(z - half.middle.value) <= REACH * half.width.value
    z, value = z[used], value[used]
    top = min(0.5 / step, 2.0 / half.width.value)
    frequency = np.linspace(0, top, FREQUENCY_STEPS)
    middle = float(np.sum(z * value) / np.sum(value))
    wave = np.cos(2 * math.pi * np.outer(frequency, z - middle))
    total = float(value.sum())
    mtf = wave @ value / total
    spread = (wave - mtf[:, None]) / total
    noise = ends.noise * np.sqrt(np.sum(spread**2, axis=1))
    floor = ends.doubt / math.sqrt(2) * np.abs(spread.sum(axis=1))
    own = blur_transfer(blur, frequency)
    clear = int(np.argmax(own < 0.3)) if bool((own < 0.3).any()) else len(own)
    curve = Spread(frequency[:clear], (mtf / own)[:clear], (np.hypot(noise, floor) / own)[:clear])
    return curve_numbers(curve, step, levels=levels)
