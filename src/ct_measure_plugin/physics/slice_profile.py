"""Slice sensitivity profile and resolution along z, from a bead or from a ramp or wire."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.mtf_curve import MtfResult, checked_spacing, checked_stack
from ct_measure_plugin.physics.results import Caution, Curve, NotMeasured, Quantity
from ct_measure_plugin.physics.ssp_blur import FWHM, Blur
from ct_measure_plugin.physics.ssp_fit import fit_shapes
from ct_measure_plugin.physics.ssp_numbers import (
    along_z,
    cautions_of,
    first_guess,
    numbers_of,
    profile_of,
)
from ct_measure_plugin.physics.ssp_samples import (
    Ramp,
    SspSamples,
    bead_samples,
    find_ramp,
    level_stack,
    ramp_samples,
)

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

__all__ = ["SliceProfile", "slice_profile"]

#: Samples a FWHM below which none is quoted.
LEAST_SAMPLES = 2.0

#: Angles between ramp and slice, degrees, beyond which a ramp tells little.
LEAST_ANGLE, MOST_ANGLE = 2.0, 70.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SliceProfile(MtfResult):
    """Slice sensitivity profile; the MTF is that along z.

    Attributes
    ----------
    fwhm, fwtm : Quantity, Quantity or NotMeasured
        Full width at half and at a tenth of the maximum, mm, what the object and the resolution in
        the slice added taken out.
    raw_fwhm : Quantity
        Full width at half maximum with what they added.
    equivalent_width : Quantity
        Area over height of the profile, mm.
    outside : Quantity
        Share of the area that lies farther than one FWHM from the middle.
    middle : Quantity
        The bead's distance from the first slice, mm; of a ramp the place is not told, 0.
    height, noise : Quantity
        What the object reads in the slice through it, and SD of one sample.
    angle : Quantity or None
        Angle between ramp and slice, degrees; None for a bead.
    profile : Curve
        The profile over the distance from its middle, 1 at its height; its `data` are the samples,
        which the object widened.
    target : str
        "bead", "ramp" or "wire".
    center_mm : (float, float)
        Where the bead lies or the ramp crosses the middle slice, y and x in mm from the centre of
        pixel (0, 0).
    """

    fwhm: Quantity
    fwtm: Quantity | NotMeasured
    raw_fwhm: Quantity
    equivalent_width: Quantity
    outside: Quantity
    middle: Quantity
    height: Quantity
    noise: Quantity
    angle: Quantity | None
    profile: Curve
    target: str
    center_mm: tuple[float, float]


def slice_profile(  # noqa: PLR0913 - one keyword a setting
    image: ArrayLike,
    *,
    spacing_mm: tuple[float, float],
    positions_mm: ArrayLike,
    target: Literal["bead", "ramp", "wire"] = "bead",
    object_size_mm: float | None = None,
    angle_deg: float | None = None,
    climb_deg: float | None = None,
    in_plane_fwhm_mm: float | None = None,
    unit: str = "HU",
    levels: tuple[float, ...] = (),
) -> SliceProfile | NotMeasured:
    """Return the slice sensitivity profile.

    Parameters
    ----------
    image : array, shape (nz, ny, nx)
        A box around one bead, through all slices that show it and some beyond; or around one ramp
        (a thin plate) or wire that climbs through the slices at a small angle to them.
    spacing_mm : (float, float)
        dy, dx.
    positions_mm : array, shape (nz,)
        Positions of the slices along their normal; they must be evenly spaced.
    target : {"bead", "ramp", "wire"}
        What lies in the box.
    object_size_mm : float, optional
        Diameter of the bead or wire, or thickness of the ramp.
    angle_deg : float, optional
        Angle between ramp or wire and the slice; found from three slices or more if not given.
    climb_deg : float, optional
        Direction in the slice, counter-clockwise on the screen from +x, along which a ramp or wire
        climbs; needed for a ramp on fewer than three slices.
    in_plane_fwhm_mm : float, optional
        Full width at half maximum of the point spread function within the slice, which widens a
        ramp's profile by its projection.
    unit : str
        Unit of the values.
    levels : tuple of float
        Further levels of the MTF along z, between 0 and 1, whose frequencies are wanted.

    Returns
    -------
    SliceProfile or NotMeasured
        NotMeasured among others if the slices are not evenly spaced.

    Raises
    ------
    ArgumentError
        If an argument is out of its range.

    Notes
    -----
    A bead is thin along z: its signal slice by slice is the profile. A ramp at the angle θ lies
    ``u tan θ`` higher a distance u further on, so one slice shows the whole profile, stretched by
    1/tan θ. A ramp averages over the positions of a helix and is right for axial scans only [1]_.
    What widens the profile besides the slice (the object's extent along z, and for a ramp the
    resolution in the slice) is part of the model. The model is two rectangles and a Gaussian
    convolved; an uncertainty holds all of their shapes that agree with the samples, see
    :mod:`ct_measure_plugin.physics.ssp_fit`.

    References
    ----------
    .. [1] Polacin, Kalender, Brink and Vannier 1994, Medical Physics 21:133.

    Examples
    --------
    >>> z = np.arange(25) * 0.4
    >>> y, x = np.mgrid[-20:21, -20:21] * 0.4
    >>> spot = np.exp(-(y**2 + x**2) / (2 * 0.6**2))
    >>> image = 300 * spot * np.exp(-((z - 4.9) ** 2) / (2 * 0.9**2))[:, None, None]
    >>> found = slice_profile(image, spacing_mm=(0.4, 0.4), positions_mm=z, object_size_mm=0.0)
    >>> round(found.fwhm.value, 2), round(2.35482 * 0.9, 2), round(found.middle.value, 2)
    (2.12, 2.12, 4.9)
    """
    steps = checked_spacing(spacing_mm)
    stack = checked_stack(image, 12)
    positions = _checked(stack, positions_mm, target, object_size_mm, angle_deg, in_plane_fwhm_mm)
    gaps = np.diff(positions)
    gap = float(np.median(gaps)) if len(gaps) else 0.0
    if len(gaps) and np.abs(gaps - gap).max() > max(0.01, 0.01 * gap):
        return NotMeasured(
            f"the slices are not evenly spaced: {gaps.min():.3g} to {gaps.max():.3g} mm",
            "send the series again complete, or reconstruct it evenly",
        )
    if float(np.ptp(stack)) == 0:
        return NotMeasured("all pixels of the box are equal", "draw it around a bead or ramp")
    found = _sampled(stack, steps, gap, target, (angle_deg, climb_deg))
    if isinstance(found, NotMeasured):
        return found
    samples, ramp, place = found
    size = object_size_mm or 0.0
    blur = Blur.of(target, size, 0.0 if ramp is None else ramp.tangent, in_plane_fwhm_mm or 0.0)
    cautions = _given(target, object_size_mm, in_plane_fwhm_mm)
    known = (target, place, blur.wider(samples.smeared), unit, levels)
    return _measured(samples, ramp, known, cautions)


def _checked(
    stack: Floats,
    positions: ArrayLike,
    target: str,
    size: float | None,
    angle: float | None,
    in_plane: float | None,
) -> Floats:
    z = np.asarray(positions, dtype=float)
    if z.shape != (len(stack),) or not bool(np.all(np.diff(z) > 0)):
        raise ArgumentError("positions_mm", f"must be {len(stack)} increasing positions", positions)
    if target not in ("bead", "ramp", "wire"):
        raise ArgumentError("target", "must be 'bead', 'ramp' or 'wire'", target)
    for name, value in (("object_size_mm", size), ("in_plane_fwhm_mm", in_plane)):
        if value is not None and not (math.isfinite(value) and value >= 0):
            raise ArgumentError(name, "must not be negative", value)
    if angle is not None and not LEAST_ANGLE <= angle <= MOST_ANGLE:
        raise ArgumentError(
            "angle_deg", f"must lie within {LEAST_ANGLE:g} to {MOST_ANGLE:g}", angle
        )
    return z


def _given(target: str, size: float | None, in_plane: float | None) -> list[Caution]:
    """Return notes on what was and was not taken out."""
    if size is None:
        return [
            Caution(
                "object-size-unknown",
                "The object's size was not given; it widens the profile.",
                "Enter it.",
            )
        ]
    if target != "bead" and in_plane is None:
        return [
            Caution(
                "object-size-unknown",
                "The resolution within the slice was not given; it widens the profile of a ramp.",
                "Enter its full width at half maximum.",
            )
        ]
    return [Caution("object-size", f"What an object of {size:g} mm adds was taken out.")]


def _sampled(
    stack: Floats,
    steps: tuple[float, float],
    gap: float,
    target: str,
    angles: tuple[float | None, float | None],
) -> tuple[SspSamples, Ramp | None, tuple[float, float]] | NotMeasured:
    """Return the samples of the profile, the ramp if there is one, and where it lies."""
    if target == "bead":
        if len(stack) < 5:
            return NotMeasured(
                f"{len(stack)} slices show no profile; at least 5 are needed", "take more slices"
            )
        found = bead_samples(stack, steps, gap)
        return found if isinstance(found, NotMeasured) else (found[0], None, found[1])
    if target == "ramp" and len(stack) < 3 and None in angles:
        return NotMeasured(
            "fewer than 3 slices do not tell along which direction a ramp climbs, and how steeply",
            "take more slices, or enter its angle and direction",
        )
    level = level_stack(stack)
    ramp = find_ramp(level, steps, gap, *angles)
    if isinstance(ramp, NotMeasured):
        return ramp
    tilt = math.degrees(math.atan(ramp.tangent))
    if not LEAST_ANGLE <= tilt <= MOST_ANGLE:
        return NotMeasured(
            f"it stands at {tilt:.1f}° to the slices; {LEAST_ANGLE:g} to {MOST_ANGLE:g}° can be"
            " measured",
            "choose another object",
        )
    samples = ramp_samples(level, ramp, steps, gap, thin=target == "wire")
    middle = ramp.centers[len(ramp.centers) // 2]
    ny, nx = stack.shape[1:]
    place = (
        float(middle[0]) + (ny - 1) / 2 * steps[0],
        float(middle[1]) + (nx - 1) / 2 * steps[1],
    )
    return samples, ramp, place


def _measured(
    samples: SspSamples,
    ramp: Ramp | None,
    known: tuple[str, tuple[float, float], Blur, str, tuple[float, ...]],
    cautions: list[Caution],
) -> SliceProfile | NotMeasured:
    target, place, blur, unit, levels = known
    guess = first_guess(samples, unit)
    if isinstance(guess, NotMeasured):
        return NotMeasured(
            f"no profile was found: {guess.reason}", "draw the box with slices on either side"
        )
    agreeing = fit_shapes(
        samples, blur, guess.middle.value, guess.width.value, base=ramp is not None
    )
    steep = 0.0 if ramp is None else ramp.tangent_doubt * math.sqrt(samples.shared)
    scale = 0.0 if ramp is None else steep / ramp.tangent
    numbers = numbers_of(agreeing, blur, scale)
    width = numbers["fwhm"]
    if isinstance(width, NotMeasured):
        return width
    refusal = _refusal(samples, width, float(agreeing.shapes.spread[0]), blur)
    if refusal is not None:
        return refusal
    mtf, more = along_z(agreeing, numbers, levels, samples.step, scale)
    middle = Quantity(0.0, "mm", 0.0)
    angle = None
    if ramp is None:
        at, doubt = agreeing.told(agreeing.middle)
        middle = Quantity(float(at), "mm", float(doubt))
    else:
        leaning = math.degrees(steep / (1 + ramp.tangent**2))
        angle = Quantity(math.degrees(math.atan(ramp.tangent)), "°", leaning)
    height, own = agreeing.told(agreeing.height)
    doubts = (float(own), agreeing.height_doubt, samples.scale_doubt * float(height))
    fields: dict[str, Any] = mtf | numbers
    return SliceProfile(
        **fields,
        middle=middle,
        height=Quantity(float(height), unit, math.hypot(*doubts)),
        noise=Quantity(samples.noise, unit, samples.noise / math.sqrt(2 * samples.freedom)),
        angle=angle,
        profile=profile_of(samples, agreeing, width.value),
        target=target,
        center_mm=place,
        cautions=(*cautions, *cautions_of(samples, agreeing, width.value), *more),
    )


def _refusal(samples: SspSamples, width: Quantity, spread: float, blur: Blur) -> NotMeasured | None:
    """Return why no width can be quoted, or None."""
    most = (width.value + 2 * (width.uncertainty or 0.0)) / samples.step
    if most < LEAST_SAMPLES:
        return NotMeasured(
            f"the profile is {width.value / samples.step:.1f} samples wide; at least"
            f" {LEAST_SAMPLES:g} are needed",
            "reconstruct with a smaller increment",
        )
    if spread**2 < blur.variance:
        return NotMeasured(
            f"the object and the resolution in the slice widen the profile by"
            f" {FWHM * math.sqrt(blur.variance):.2g} mm, more than the slice itself",
            "measure a smaller object, or a ramp at a smaller angle",
        )
    return None
