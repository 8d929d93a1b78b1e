"""What the object and the resolution within the slice add to a slice profile."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import fft

from ct_measure_plugin.physics.profile_widths import Ends, Peak, peak_width
from ct_measure_plugin.physics.results import NotMeasured, Quantity
from ct_measure_plugin.physics.wire_transform import object_transfer

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.ssp_samples import SspSamples

    Floats = NDArray[np.float64]

__all__ = ["Blur", "blur_transfer", "widths_without_blur"]


@dataclass(frozen=True, slots=True)
class Blur:
    """What widens a profile besides the slice.

    Attributes
    ----------
    target : str
        "bead", "ramp" or "wire".
    size : float
        Diameter of bead or wire, thickness of the ramp, mm.
    tangent : float or None
        Of the angle between ramp and slice.
    in_plane : float
        FWHM of the point spread function within the slice, mm, as if it were a Gaussian.
    """

    target: str
    size: float
    tangent: float | None
    in_plane: float


def blur_transfer(blur: Blur, frequency: Floats) -> Floats:
    """Return the transfer function along z of what widens the profile, 1 at frequency 0.

    A bead: that of a sphere. A ramp of thickness t: ``sinc(f t / cos θ)``, its extent along z,
    times the Gaussian of the slice's resolution at the frequency ``f tan θ`` in the slice. A wire:
    that of a cylinder of diameter D / cos θ instead of the sinc.

    >>> f = np.array([0.0, 0.5])
    >>> blur_transfer(Blur("ramp", 0.3, math.tan(math.radians(25)), 0.0), f).round(4)
    array([1.    , 0.9555])
    """
    if blur.tangent is None:
        return object_transfer(frequency, blur.size, "bead")
    extent = blur.size * math.hypot(1.0, blur.tangent)
    sigma = blur.in_plane / 2.354820 * blur.tangent
    within = np.exp(-2 * (math.pi * sigma * frequency) ** 2)
    if blur.target == "wire":
        found: Floats = object_transfer(frequency, extent, "wire") * within
        return found
    plate: Floats = np.sinc(frequency * extent) * within
    return plate


def widths_without_blur(
    fine: SspSamples,
    half: Peak,
    tenth: Peak | NotMeasured,
    blur: Blur,
    ends: Ends,
    scale_doubt: float,
    summit: float,
) -> dict[str, object]:
    """Return the widths with what the blur added taken out.

    The blur is applied once more; what the widths then grow by is what it added the first time, to
    first order in its variance: all of it for a Gaussian, nothing for the half width of a box.
    """
    raw = Quantity(half.width.value, "mm", _with(half.width, scale_doubt))
    again = _blurred(fine, blur, ends)
    found: dict[str, object] = {"raw_fwhm": raw}
    for name, peak, share in (("fwhm", half, 0.5), ("fwtm", tenth, 0.1)):
        if isinstance(peak, NotMeasured):
            found[name] = peak
            continue
        wider = peak_width(fine.z, again, ends, "", share, summit=summit)
        grown = 0.0 if isinstance(wider, NotMeasured) else wider.width.value - peak.width.value
        width = peak.width.value - max(grown, 0.0)
        found[name] = Quantity(width, "mm", _with(peak.width, scale_doubt))
    return found


def _with(width: Quantity, scale_doubt: float) -> float:
    return math.hypot(width.uncertainty or 0.0, width.value * scale_doubt)


def _blurred(fine: SspSamples, blur: Blur, ends: Ends) -> Floats:
    """Return the profile after the blur, its ends continued as they are."""
    step = float(fine.z[1] - fine.z[0])
    n = len(fine.z)
    base = (ends.low + ends.high) / 2
    size = fft.next_fast_len(3 * n, real=True)
    wave = fft.rfft(fine.value - base, size)
    wave *= blur_transfer(blur, fft.rfftfreq(size, step))
    found: Floats = fft.irfft(wave, size)[:n] + base
    return found
