"""MTF from the cross-section of a thin wire, or of a bead."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.edge_noise import (
    NoiseSpectrum,
    independent_slices,
    residual_spectrum,
)
from ct_measure_plugin.physics.mtf_curve import (
    FREQUENCY_STEPS,
    MtfResult,
    Spread,
    checked_spacing,
    checked_stack,
    curve_numbers,
)
from ct_measure_plugin.physics.psf_fit import fit_psf
from ct_measure_plugin.physics.results import Curve, NotMeasured, Quantity
from ct_measure_plugin.physics.wire_checks import (
    LEAST_FOR_FIT,
    WireFacts,
    background_slope,
    folded_levels,
    wire_cautions,
    wire_refusal,
)
from ct_measure_plugin.physics.wire_spot import by_direction, place_doubts, radial_psf, spot_width
from ct_measure_plugin.physics.wire_trace import WireTrace, trace_wire
from ct_measure_plugin.physics.wire_transform import (
    Section,
    Sums,
    cut_sections,
    object_transfer,
    phase_weights,
    transform,
)

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

__all__ = ["WireMtf", "wire_mtf"]

#: Radius of what is transformed, in FWHM.
REACH = 5.0

#: Where the object's own transfer function falls below this, the curve ends.
LEAST_TRANSFER = 0.3


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class WireMtf(MtfResult):
    """MTF from a wire or bead.

    Attributes
    ----------
    width : Quantity
        Full width at half maximum of the point spread function, the object's size included, mm.
    height, noise, contrast_to_noise : Quantity
        Height of the spot over the background, SD of the background's pixels, and their ratio.
    lean : Quantity or None
        Angle of the wire to the slice normal, degrees; None for a single slice.
    diameter : Quantity or None
        The object's diameter that was divided out, mm.
    psf : Curve
        Mean over rings about the centre, over the radius in mm; 1 at the centre.
    directions : Curve
        f50 by direction, degrees counter-clockwise on the screen from +x.
    center_mm, center_doubt_mm : (float, float) and float
        The wire half-way through the slices, y and x in mm from the centre of pixel (0, 0), and its
        standard uncertainty.
    ends_mm : tuple
        The wire in the first and in the last slice, as (y, x) in mm.
    method : str
        "fitted", "transform" or "rings".
    """

    width: Quantity | NotMeasured
    height: Quantity | NotMeasured
    noise: Quantity
    contrast_to_noise: Quantity | NotMeasured
    lean: Quantity | None
    diameter: Quantity | None
    psf: Curve
    directions: Curve
    center_mm: tuple[float, float]
    center_doubt_mm: float
    ends_mm: tuple[tuple[float, float], tuple[float, float]]
    method: str


def wire_mtf(  # noqa: PLR0913 - one keyword a setting
    image: ArrayLike,
    *,
    spacing_mm: tuple[float, float],
    object_diameter_mm: float | None = None,
    shape: Literal["wire", "bead"] = "wire",
    method: Literal["fitted", "transform", "rings"] = "fitted",
    direction_deg: float | None = None,
    slice_gap_mm: float | None = None,
    slice_thickness_mm: float | None = None,
    unit: str = "HU",
    limits: tuple[float, float] | None = None,
    levels: tuple[float, ...] = (),
) -> WireMtf | NotMeasured:
    """Return the MTF from the wire or bead in a box.

    Parameters
    ----------
    image : array, shape (ny, nx) or (nz, ny, nx)
        A box about the wire. Of a wire, several slices are used together, each about its own
        place on the straight axis; let it lean by one to five degrees.
    spacing_mm : (float, float)
        dy, dx.
    object_diameter_mm : float, optional
        Diameter of the wire or bead; its own transfer function is divided out.
    shape : {"wire", "bead"}
        A cylinder across the slice, or a sphere within it.
    method : {"fitted", "transform", "rings"}
        "fitted": a spot composed of flexible shapes, as smooth as the noise asks. "transform": the
        two-dimensional transform about the centre. "rings": pixels weighed by the rings that
        they stand for (an oversampled radial profile and its Hankel transform).
    direction_deg : float, optional
        Direction of the MTF, counter-clockwise on the screen from +x; by default the mean over
        all directions. "transform" only.
    slice_gap_mm, slice_thickness_mm : float, optional
        Distance between slices, for the lean; their thickness, for the blur of a leaning wire.
    unit : str
        Unit of the values.
    limits : (float, float), optional
        Lowest and highest value the encoding can hold.
    levels : tuple of float
        Further levels of the MTF, between 0 and 1, whose frequencies are wanted.

    Returns
    -------
    WireMtf or NotMeasured

    Raises
    ------
    ArgumentError
        If the image has fewer than 12 pixels a side or holds no finite numbers, or another
        argument is out of its range.

    Notes
    -----
    A plane fitted to a ring about the wire is the background. The real part of the transform about
    the wire's centre is taken, which noise does not bias [1]_. On one slice the curve ends at the
    pixels' Nyquist frequency; slices of a leaning wire sample it at different places of the pixel
    grid, and weights that cancel the folded spectra carry the curve beyond. The object's own
    transfer is 2 J1(x)/x of a wire, 3 (sin x - x cos x)/x³ of a bead, x = π D f.

    References
    ----------
    .. [1] Judy 1976, Medical Physics 3:233; Nickoloff 1988, Medical Physics (wire and pixel size).

    Examples
    --------
    >>> y, x = np.mgrid[-24:25, -24:25] * 0.4
    >>> image = 500 * np.exp(-((y - 0.1) ** 2 + (x + 0.07) ** 2) / (2 * 0.6**2))
    >>> found = wire_mtf(image, spacing_mm=(0.4, 0.4), object_diameter_mm=0.0)
    >>> round(found.f50.value, 4), round(0.187391 / 0.6, 4)
    (0.3123, 0.3123)
    """
    steps = checked_spacing(spacing_mm)
    stack = checked_stack(image, 12)
    _checked(object_diameter_mm, shape, method, direction_deg)
    if float(np.ptp(stack)) == 0:
        return NotMeasured("all pixels of the box are equal", "draw it around a wire")
    found = _located(stack, steps)
    if isinstance(found, NotMeasured):
        return found
    trace, sections = found
    outside = [s.value[s.outside] for s in sections]
    noise = math.sqrt(float(np.mean([np.mean(v**2) for v in outside])))
    weights, folded = phase_weights(trace, steps)
    slope = background_slope(stack, sections)
    facts = WireFacts(trace, sections, noise, folded, max(steps), *slope)
    refusal = wire_refusal(stack, facts, limits, object_diameter_mm, method)
    if refusal is not None:
        return refusal
    spectrum, slices = _noise_of(sections, steps)
    worse = math.sqrt(len(stack) / slices)
    top = _top(facts, object_diameter_mm, shape, sampled=method != "fitted")
    if top * trace.sigma < 0.2:
        return NotMeasured(
            "the object's own size leaves no frequency range to measure",
            "use a thinner wire, or measure it as a disc",
        )
    frequency = np.linspace(0, top, FREQUENCY_STEPS)
    own = object_transfer(frequency, object_diameter_mm or 0.0, shape)
    if method == "fitted":
        mtf, doubt = fit_psf(sections, trace.sigma, max(steps), spectrum, slices).mtf(frequency)
    else:
        mtf, doubt = transform(
            sections,
            frequency,
            steps,
            spectrum,
            direction_deg=direction_deg,
            ring_mm=0.6 * trace.sigma if method == "rings" else None,
            slice_weights=weights,
        )
        doubt = doubt * worse
    spread = Spread(frequency, mtf / own, doubt / own)
    numbers, cautions = curve_numbers(spread, max(steps), levels=levels)
    if method != "fitted":
        cautions += folded_levels(facts, numbers, {"f50": 0.5, "f10": 0.1, "f2": 0.02})
    f50 = numbers["f50"]
    if isinstance(f50, Quantity) and f50.uncertainty and f50.uncertainty > 0.3 * f50.value:
        return NotMeasured(
            f"noise leaves f50 uncertain by {100 * f50.uncertainty / f50.value:.0f} %",
            "take more slices, or a denser wire",
        )
    thickness = (
        None if slice_gap_mm is None else (slice_thickness_mm or slice_gap_mm) / slice_gap_mm
    )
    places = place_doubts(sections[len(sections) // 2], trace, spectrum, slices)
    around = Sums(sections, steps, spectrum, None, weights)
    fields: dict[str, Any] = numbers | _spot_numbers(facts, spectrum, slices, unit, stack.shape)
    return WireMtf(
        **fields,
        lean=_lean(trace.shift, places[1], slice_gap_mm, len(stack)),
        center_doubt_mm=places[0],
        diameter=None if object_diameter_mm is None else Quantity(object_diameter_mm, "mm", 0.0),
        directions=by_direction(around, frequency[::2], own[::2], worse),
        method=method,
        cautions=(
            *wire_cautions(facts, object_diameter_mm, thickness, method),
            *cautions,
        ),
    )


def _checked(diameter: float | None, shape: str, method: str, direction: float | None) -> None:
    if diameter is not None and not (math.isfinite(diameter) and diameter >= 0):
        raise ArgumentError("object_diameter_mm", "must not be negative", diameter)
    if shape not in ("wire", "bead"):
        raise ArgumentError("shape", "must be 'wire' or 'bead'", shape)
    if method not in ("fitted", "transform", "rings"):
        raise ArgumentError("method", "must be 'fitted', 'transform' or 'rings'", method)
    if direction is not None and method != "transform":
        raise ArgumentError("direction_deg", f"must be left out with method '{method}'", direction)


def _located(
    stack: Floats, steps: tuple[float, float]
) -> tuple[WireTrace, list[Section]] | NotMeasured:
    """Return the wire and its sections; traced again once the background is level."""
    trace = trace_wire(stack, steps)
    if isinstance(trace, NotMeasured):
        return trace
    level = np.array([s.value for s in cut_sections(stack, trace, steps)])
    again = trace_wire(level, steps)
    if isinstance(again, NotMeasured):
        return again
    return again, cut_sections(level, again, steps, REACH * 2.3548 * again.sigma)


def _noise_of(sections: list[Section], steps: tuple[float, float]) -> tuple[NoiseSpectrum, float]:
    """Return the background's noise spectrum and how many independent slices there are."""
    masked = np.array([np.where(s.outside, s.value, 0.0) for s in sections])
    parts = [
        residual_spectrum(v, steps, s.outside.astype(float))
        for v, s in zip(masked, sections, strict=True)
    ]
    power = np.mean([p.power for p in parts], axis=0)
    return NoiseSpectrum(parts[0].frequency, power, steps), independent_slices(masked)


def _top(facts: WireFacts, diameter: float | None, shape: str, *, sampled: bool) -> float:
    """Return where the curve ends: Nyquist, unless slices carry it on; or the object's own end."""
    sigma, pixel = facts.trace.sigma, facts.pixel
    top = 1.3 / sigma
    if sampled:
        top = min(top, 0.5 / pixel if facts.folded > 0.1 else 0.9 / pixel)
    if diameter:
        f = np.linspace(0, top, 401)
        low = np.flatnonzero(object_transfer(f, diameter, shape) < LEAST_TRANSFER)
        top = float(f[low[0] - 1]) if len(low) else top
    return top


def _lean(shift: float, doubt: float, gap: float | None, slices: int) -> Quantity | None:
    if gap is None or slices == 1:
        return None
    angle = math.degrees(math.atan2(shift, gap))
    doubt = doubt / gap / (1 + (shift / gap) ** 2)
    return Quantity(angle, "°", math.degrees(doubt))


def _spot_numbers(
    facts: WireFacts,
    spectrum: NoiseSpectrum,
    slices: float,
    unit: str,
    shape: tuple[int, ...],
) -> dict[str, object]:
    width, height = _width_and_height(facts, spectrum, slices, unit)
    nz, ny, nx = shape
    dy, dx = spectrum.spacing_mm
    middle = np.array([(ny - 1) / 2 * dy, (nx - 1) / 2 * dx])
    centers = facts.trace.centers + middle
    share = float(np.mean(facts.sections[0].outside))
    count = spectrum.independent((ny, nx)) * share * slices
    doubt = facts.noise / math.sqrt(2 * max(count - 3, 1.0))
    ratio: Quantity | NotMeasured = NotMeasured("there is no noise", "none is needed")
    if isinstance(height, NotMeasured):
        ratio = height
    elif facts.noise > 0:
        value = abs(height.value) / facts.noise
        own = (height.uncertainty or 0.0) / abs(height.value)
        ratio = Quantity(value, "", value * math.hypot(own, doubt / facts.noise))
    top = height.value if isinstance(height, Quantity) else float(np.median(facts.trace.heights))
    place = centers.mean(axis=0)
    return {
        "width": width,
        "height": height,
        "noise": Quantity(facts.noise, unit, doubt),
        "contrast_to_noise": ratio,
        "psf": radial_psf(facts.sections, top, facts.fwhm),
        "center_mm": (float(place[0]), float(place[1])),
        "ends_mm": tuple((float(p[0]), float(p[1])) for p in (centers[0], centers[nz - 1])),
    }


def _width_and_height(
    facts: WireFacts, spectrum: NoiseSpectrum, slices: float, unit: str
) -> tuple[Quantity, Quantity] | tuple[NotMeasured, NotMeasured]:
    if facts.coarser(LEAST_FOR_FIT):
        none = NotMeasured(
            f"the spot is {facts.fwhm / facts.pixel:.2g} pixels wide at one place of the pixel"
            " grid: its top may lie between the pixels",
            "take several slices of a tilted wire, or smaller pixels",
        )
        return none, none
    width, height = spot_width(facts.sections, facts.fwhm, spectrum, slices)
    return width, Quantity(height.value, unit, height.uncertainty)
