"""What is read from the slice profiles that agree with the samples of one."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.physics.mtf_curve import FREQUENCY_STEPS, Spread, curve_numbers
from ct_measure_plugin.physics.profile_widths import Ends, Peak, peak_width
from ct_measure_plugin.physics.results import Caution, Curve, NotMeasured, Quantity

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.ssp_blur import Blur
    from ct_measure_plugin.physics.ssp_fit import Agreeing
    from ct_measure_plugin.physics.ssp_samples import SspSamples

    Floats = NDArray[np.float64]

__all__ = ["along_z", "cautions_of", "first_guess", "numbers_of", "profile_of"]

#: Share of the samples at either end that tell the background of the first guess, and points
#: between two samples at which its width is read.
ENDS, FINE = 0.12, 10

#: Points of the curves; the profile is drawn this many FWHM to either side, the MTF up to this
#: over the FWHM.
POINTS, ACROSS, UP_TO = 161, 2.0, 2.0

#: Relative standard uncertainty above which a width or a frequency is not quoted.
MOST_DOUBT = 0.1

#: Samples a FWHM below which it is cautioned, and share of the height above which a misfit is that
#: noise does not explain.
FAIR_SAMPLES, FAIR_MISFIT = 4.0, 0.003


def first_guess(samples: SspSamples, unit: str) -> Peak | NotMeasured:
    """Return width, height and middle of the samples joined by lines."""
    z, value = samples.z, samples.value
    count = max(2, round(ENDS * len(z)))
    low, high = float(np.median(value[:count])), float(np.median(value[-count:]))
    noise = samples.noise
    doubt = noise * math.sqrt(math.pi / 2 / count)
    ends = Ends(low, high, noise, doubt, samples.step, max(samples.freedom, 5.0))
    fine = np.linspace(z[0], z[-1], FINE * len(z) + 1)
    found = peak_width(fine - z[0], np.interp(fine, z, value), ends, unit)
    if isinstance(found, NotMeasured):
        return found
    middle = replace(found.middle, value=found.middle.value + float(z[0]))
    return replace(found, middle=middle)


def _sure(value: Quantity, what: str) -> Quantity | NotMeasured:
    doubt = (value.uncertainty or 0.0) / value.value
    if doubt <= MOST_DOUBT:
        return value
    return NotMeasured(
        f"noise and the distance between samples leave {what} uncertain by {100 * doubt:.0f} %",
        "reconstruct with a smaller increment, or measure a stronger contrast or a ramp",
    )


def numbers_of(agreeing: Agreeing, blur: Blur, scale_doubt: float) -> dict[str, Any]:
    """Return widths and areas; `scale_doubt` is the relative uncertainty of lengths along z."""
    shapes = agreeing.shapes
    half = shapes.widths(0.5)

    def length(values: Floats) -> Quantity:
        best, doubt = agreeing.told(values)
        return Quantity(float(best), "mm", math.hypot(float(doubt), scale_doubt * float(best)))

    outside, doubt = agreeing.told(shapes.outside(half))
    return {
        "fwhm": _sure(length(half), "the width"),
        "fwtm": _sure(length(shapes.widths(0.1)), "the width at a tenth"),
        "raw_fwhm": length(shapes.widths(0.5, blur)),
        "equivalent_width": length(shapes.areas()),
        "outside": Quantity(float(outside), "", float(doubt)),
    }


def profile_of(samples: SspSamples, agreeing: Agreeing, fwhm: float) -> Curve:
    """Return the profile, 1 at its height, and the samples, which the object widened."""
    z = np.linspace(-ACROSS * fwhm, ACROSS * fwhm, POINTS)
    value, doubt = agreeing.told(agreeing.shapes.at(z) * agreeing.shapes.areas()[:, None])
    middle, height = float(agreeing.middle[0]), float(agreeing.height[0])
    near = np.abs(samples.z - middle) <= ACROSS * fwhm
    noise = np.sqrt(np.diag(samples.covariance))[near] / abs(height)
    read = (samples.value[near] - agreeing.base) / height
    named = ("distance", "mm", "profile", "")
    data = Curve(samples.z[near] - middle, read, noise, *named, joined=False)
    return Curve(z, value, doubt, *named, data=data)


def along_z(
    agreeing: Agreeing,
    numbers: dict[str, Any],
    levels: tuple[float, ...],
    step: float,
    scale_doubt: float,
) -> tuple[dict[str, object], list[Caution]]:
    """Return the numbers of the MTF along z, and cautions in words that fit the direction.

    `numbers` holds the widths: where that at a tenth is not told, the shape is open, and no
    frequency is.
    """
    fwhm, fwtm = numbers["fwhm"].value, numbers["fwtm"]
    frequency = np.linspace(0, UP_TO / fwhm, FREQUENCY_STEPS)
    mtf, doubt = agreeing.told(agreeing.shapes.spectra(frequency))
    stretched = scale_doubt * frequency * np.gradient(mtf, frequency)
    spread = Spread(frequency, mtf, np.hypot(doubt, stretched))
    found, cautions = curve_numbers(spread, step, levels=levels)
    for name in ("f50", "f10", "f2"):
        value = found[name]
        if isinstance(value, Quantity):
            found[name] = fwtm if isinstance(fwtm, NotMeasured) else _sure(value, name)
    return found, [_worded(caution) for caution in cautions]


def _worded(caution: Caution) -> Caution:
    if caution.code != "aliasing":
        return replace(caution, remedy="Measure a stronger contrast, or more slices.")
    text = caution.text.replace("the pixels' Nyquist", "the samples' Nyquist")
    text = text.replace("the image is aliased", "along z it is aliased")
    return replace(caution, text=text, remedy="Reconstruct at a smaller increment.")


def cautions_of(samples: SspSamples, agreeing: Agreeing, fwhm: float) -> list[Caution]:
    """Return what a reader must know of the samples and of how the model fits them."""
    found = []
    count = fwhm / samples.step
    if count < FAIR_SAMPLES:
        found.append(
            Caution(
                "coarse-sampling",
                f"The profile is only {count:.1f} samples wide.",
                "Reconstruct with a smaller increment.",
            )
        )
    if agreeing.surplus > 1 and agreeing.misfit > FAIR_MISFIT:
        found.append(
            Caution(
                "profile-shape",
                f"No shape fits the profile: its samples lie {100 * agreeing.misfit:.1f} % of the"
                " height beside the best one, more than noise explains.",
                "Look at the curve, and see that the region holds one object alone.",
            )
        )
    return found
