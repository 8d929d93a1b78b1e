"""MTF across the round edge of a rod or cylinder: the task transfer function."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.circle_stack import CircleStack, locate_stack
from ct_measure_plugin.physics.disc_checks import disc_cautions, disc_refusal
from ct_measure_plugin.physics.disc_curvature import curvature_of
from ct_measure_plugin.physics.edge_bins import bin_by_distance
from ct_measure_plugin.physics.esf_measure import (
    EsfData,
    Method,
    jacobian_doubt,
    measure_esf,
    noise_numbers,
)
from ct_measure_plugin.physics.mtf_curve import (
    MtfResult,
    checked_spacing,
    checked_stack,
    curve_numbers,
)
from ct_measure_plugin.physics.results import Curve, NotMeasured, Quantity

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

__all__ = ["DiscMtf", "disc_mtf"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class DiscMtf(MtfResult):
    """MTF across a circular edge, at this object's contrast and this image's noise.

    Attributes
    ----------
    radius : Quantity
        Radius of the object, mm.
    roundness : Quantity
        Amplitude of the radius's second harmonic, mm; 0 for a circle. It is followed.
    lean : Quantity or None
        Angle of the object's axis to the slice normal, degrees; None for a single slice.
    contrast, noise, contrast_to_noise : Quantity
        Object minus surroundings, SD of the pixels about the fit, and their ratio.
    width, overshoot : Quantity
        FWHM of the line spread function, mm, and overshoot relative to the contrast.
    esf, lsf : Curve
        Over the distance inwards from the edge, mm.
    center_mm, center_doubt_mm : (float, float)
        The centre, y and x in mm from the centre of pixel (0, 0), half-way through the slices, and
        its standard uncertainty.
    method : str
        "fitted" or "conventional".
    """

    radius: Quantity
    roundness: Quantity
    lean: Quantity | None
    contrast: Quantity
    noise: Quantity
    contrast_to_noise: Quantity | NotMeasured
    width: Quantity | NotMeasured
    overshoot: Quantity
    esf: Curve
    lsf: Curve
    center_mm: tuple[float, float]
    center_doubt_mm: tuple[float, float]
    method: str


def disc_mtf(
    image: ArrayLike,
    *,
    spacing_mm: tuple[float, float],
    method: Method = "fitted",
    sector_deg: tuple[float, float] | None = None,
    slice_gap_mm: float | None = None,
    unit: str = "HU",
    limits: tuple[float, float] | None = None,
    levels: tuple[float, ...] = (),
) -> DiscMtf | NotMeasured:
    """Return the MTF across the edge of the one rod or cylinder in an image.

    Parameters
    ----------
    image : array, shape (ny, nx) or (nz, ny, nx)
        A box around the object with its surroundings; several slices are pooled, their centres
        on a straight axis that may lean.
    spacing_mm : (float, float)
        dy, dx.
    method : {"fitted", "conventional"}
        As for :func:`edge_mtf`.
    sector_deg : (float, float), optional
        Direction (degrees counter-clockwise on the screen from +x) and half-width: only edge
        whose normal lies within, on either side of the object, is used. Default: all around.
    slice_gap_mm : float, optional
        Distance between slices, for the lean of the axis.
    unit : str
        Unit of the values.
    limits : (float, float), optional
        Lowest and highest value the encoding can hold.
    levels : tuple of float
        Further levels of the MTF, between 0 and 1, whose frequencies are wanted.

    Returns
    -------
    DiscMtf or NotMeasured

    Raises
    ------
    ArgumentError
        If the image has fewer than 16 pixels a side or holds no finite numbers, or another
        argument is out of its range.

    Notes
    -----
    Pixels are placed by their distance from the fitted circle. [1]_ [2]_ The radial profile of a
    blurred disc differs from a straight edge's in second order: a Gaussian's frequencies read low
    by (sigma / radius)² / 4, and its middle lies sigma² / (2 radius) inwards. Both are corrected.

    References
    ----------
    .. [1] Richard et al. 2012, Medical Physics 39:4115 (task transfer function).
    .. [2] ASTM E1695 (cylinder edge, industrial CT).

    Examples
    --------
    >>> from scipy.special import ndtr
    >>> y, x = np.mgrid[-40:41, -40:41] * 0.5
    >>> image = 100 * ndtr((12.5 - np.hypot(y - 0.1, x + 0.2)) / 0.6)
    >>> found = disc_mtf(image, spacing_mm=(0.5, 0.5))
    >>> bool(abs(found.f50.value / (0.187391 / 0.6) - 1) < 5e-3)  # a Gaussian of 0.6 mm
    True
    >>> round(found.radius.value, 1)
    12.5
    """
    steps = checked_spacing(spacing_mm)
    stack = checked_stack(image, 16)
    _checked_options(method, sector_deg)
    if float(np.ptp(stack)) == 0:
        return NotMeasured("all pixels of the box are equal", "draw it around a rod")
    rod = locate_stack(stack, steps)
    if isinstance(rod, NotMeasured):
        return rod
    data = _data(stack, steps, rod, sector_deg)
    doubts = jacobian_doubt(rod.middle.jacobian, data.spectrum)[:3] / math.sqrt(rod.independent())
    refusal = disc_refusal(stack, rod, data, limits, float(doubts[0]))
    if refusal is not None:
        return refusal
    spread, shape = measure_esf(data, method, unit)
    numbers, cautions = curve_numbers(
        spread, data.pixel_mm, levels=levels, slope_over=0.05 if method == "fitted" else 0.2
    )
    f50 = numbers["f50"]
    if isinstance(f50, Quantity) and f50.uncertainty and f50.uncertainty > 0.3 * f50.value:
        return NotMeasured(
            f"noise leaves f50 uncertain by {100 * f50.uncertainty / f50.value:.0f} %",
            "pool more slices, or measure a stronger contrast",
        )
    fields: dict[str, Any] = numbers | _circle_numbers(rod, data, doubts, stack.shape[1:])
    pixels = data.spectrum.independent(stack.shape[1:]) / rod.middle.annulus.used.size
    count = pixels * float(rod.middle.annulus.used.sum()) * rod.independent()
    fields |= noise_numbers(rod.noise, count, shape.contrast)
    fields["contrast"] = shape.contrast  # signed: object minus surroundings
    lean = _lean(rod, slice_gap_mm)
    return DiscMtf(
        **fields,
        lean=lean,
        width=shape.width,
        overshoot=shape.overshoot,
        esf=shape.esf,
        lsf=shape.lsf,
        method=method,
        cautions=(*disc_cautions(rod, data, lean), *cautions),
    )


def _checked_options(method: str, sector_deg: tuple[float, float] | None) -> None:
    if method not in ("fitted", "conventional"):
        raise ArgumentError("method", "must be 'fitted' or 'conventional'", method)
    if sector_deg is not None and not 0 < sector_deg[1] <= 90:
        raise ArgumentError("sector_deg", "must have a half-width within 0 to 90", sector_deg)


def _lean(rod: CircleStack, gap_mm: float | None) -> Quantity | None:
    if gap_mm is None or len(rod.circles) == 1:
        return None
    angle = math.degrees(math.atan2(rod.shift, gap_mm))
    return Quantity(
        angle, "°", math.degrees(rod.shift_doubt / gap_mm / (1 + (rod.shift / gap_mm) ** 2))
    )


def _data(
    stack: Floats,
    steps: tuple[float, float],
    rod: CircleStack,
    sector_deg: tuple[float, float] | None,
) -> EsfData:
    pixel, sigma = max(steps), rod.sigma
    bent = curvature_of(rod.middle.rough, rod.middle.annulus.radius)
    distance, value = [], []
    for plane, circle in zip(stack, rod.circles, strict=True):
        kept = circle.annulus.used
        if sector_deg is not None:
            off = np.degrees(-circle.annulus.azimuth) - sector_deg[0]
            kept = kept & (np.abs((off + 90) % 180 - 90) <= sector_deg[1])
        distance.append(circle.annulus.distance[kept])
        value.append(plane[kept] - bent.at(circle.annulus.distance[kept]))
    d, v = np.concatenate(distance), np.concatenate(value)
    share = 1.0 if sector_deg is None else sector_deg[1] / 90.0
    if sector_deg is None:
        normals = np.arange(16, dtype=np.float64) * (math.pi / 16)
    else:
        turn = sector_deg[1] * np.linspace(-1.0, 1.0, 9, dtype=np.float64)
        normals = np.asarray(np.radians(turn - sector_deg[0]), dtype=np.float64)
    dense = bin_by_distance(d, v, pixel / 10, half=3 * 2.3548 * sigma)
    samples = float(np.median(dense.count)) if len(dense.count) else 0.1
    width = pixel / 10 if samples >= 5 else min(pixel / 2 / samples, pixel / 4)
    rough = rod.middle.rough
    return EsfData(
        distance=d,
        value=v,
        sigma=sigma,
        reach=(-float(d.min()), float(d.max())),
        bin_width=width,
        gap=dense.largest_gap(3 * 2.3548 * sigma),
        contrast=float(np.diff(rough.at(np.array([d.min(), d.max()])))[0]),
        pixel_mm=pixel,
        spectrum=rod.spectrum(steps),
        normals=normals,
        length=2 * math.pi * rod.middle.annulus.radius * share * rod.independent(),
    )


def _circle_numbers(
    rod: CircleStack, data: EsfData, doubts: Floats, shape: tuple[int, ...]
) -> dict[str, object]:
    circle = rod.middle
    radius = circle.annulus.radius + curvature_of(circle.rough, circle.annulus.radius).shift
    centers = np.array([c.annulus.center for c in rod.circles]).mean(axis=0)
    ny, nx = shape
    dy, dx = data.spectrum.spacing_mm
    return {
        "radius": Quantity(radius, "mm", float(doubts[0])),
        "roundness": Quantity(
            math.hypot(*circle.annulus.harmonic), "mm", float(doubts[0]) * math.sqrt(2)
        ),
        "center_mm": (
            float(centers[0]) + (ny - 1) / 2 * dy,
            float(centers[1]) + (nx - 1) / 2 * dx,
        ),
        "center_doubt_mm": (float(doubts[1]), float(doubts[2])),
    }
