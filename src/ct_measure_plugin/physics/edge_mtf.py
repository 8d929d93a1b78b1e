"""MTF from a straight, slanted edge in a box."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.edge_bins import bin_by_distance
from ct_measure_plugin.physics.edge_checks import EdgeFacts, edge_cautions, edge_refusal
from ct_measure_plugin.physics.edge_line import EdgeLine, locate_edge
from ct_measure_plugin.physics.edge_noise import NoiseSpectrum, residual_spectrum
from ct_measure_plugin.physics.edge_slices import check_slices
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

__all__ = ["EdgeMtf", "edge_mtf"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class EdgeMtf(MtfResult):
    """MTF across a straight edge.

    Attributes
    ----------
    angle : Quantity
        Tilt of the edge from the nearer pixel axis, 0 to 45°.
    normal_direction : Quantity
        Direction in which the MTF was measured: the edge's normal, degrees counter-clockwise on
        the screen from +x, 0 to 180.
    position : Quantity
        Distance of the edge from the middle of the box along the normal, towards the higher
        values, mm.
    contrast, noise, contrast_to_noise : Quantity
        Step of the edge, SD of the pixels about the fit, and their ratio.
    width : Quantity
        Full width at half maximum of the line spread function, mm.
    overshoot : Quantity
        How far the edge spread function rises over its plateau, relative to the step.
    esf, lsf : Curve
        Edge and line spread function over the distance in mm. The LSF has unit area.
    ends_mm : tuple
        The found edge as two points (y, x) in mm from the centre of pixel (0, 0).
    method : str
        "fitted" or "conventional".
    """

    angle: Quantity
    normal_direction: Quantity
    position: Quantity
    contrast: Quantity
    noise: Quantity
    contrast_to_noise: Quantity | NotMeasured
    width: Quantity | NotMeasured
    overshoot: Quantity
    esf: Curve
    lsf: Curve
    ends_mm: tuple[tuple[float, float], tuple[float, float]]
    method: str


def edge_mtf(
    image: ArrayLike,
    *,
    spacing_mm: tuple[float, float],
    method: Method = "fitted",
    unit: str = "HU",
    limits: tuple[float, float] | None = None,
    levels: tuple[float, ...] = (),
) -> EdgeMtf | NotMeasured:
    """Return the MTF across the one straight edge in a box.

    Parameters
    ----------
    image : array, shape (ny, nx) or (nz, ny, nx)
        The box: a straight edge between two even materials, leaning at least 1.5° from the rows
        and columns. Slices are averaged; the edge must not move from one to the next.
    spacing_mm : (float, float)
        dy, dx.
    method : {"fitted", "conventional"}
        "fitted" composes the edge spread function of flexible shapes, as smooth as the noise
        asks; "conventional" bins, differentiates, windows and transforms.
    unit : str
        Unit of the values.
    limits : (float, float), optional
        Lowest and highest value the encoding can hold.
    levels : tuple of float
        Further levels of the MTF, between 0 and 1, whose frequencies are wanted.

    Returns
    -------
    EdgeMtf or NotMeasured

    Raises
    ------
    ArgumentError
        If the image has fewer than 16 pixels a side or holds no finite numbers, a spacing is not
        positive, or a level not between 0 and 1.

    Notes
    -----
    Every pixel is placed by its distance from the edge line, which makes the sampling far finer
    than the pixels [1]_ [2]_. A CT pixel is a sample of the reconstructed function, not a mean
    over its area, so no pixel aperture is divided out. Uncertainties come from the noise power
    spectrum of the pixels about the fit; see the page on this measurement.

    References
    ----------
    .. [1] Judy 1976, Medical Physics 3:233.
    .. [2] ISO 12233, slanted edge; Samei, Flynn and Reimann 1998, Medical Physics 25:102.

    Examples
    --------
    >>> from scipy.special import ndtr
    >>> y, x = np.mgrid[-32:32, -32:32] * 0.5
    >>> turn = np.radians(4.0)
    >>> image = 100 * ndtr((x * np.cos(turn) + y * np.sin(turn)) / 0.6)
    >>> found = edge_mtf(image, spacing_mm=(0.5, 0.5))
    >>> round(found.f50.value, 3), round(0.187391 / 0.6, 3), round(found.angle.value, 3)
    (0.312, 0.312, 4.0)
    """
    if method not in ("fitted", "conventional"):
        raise ArgumentError("method", "must be 'fitted' or 'conventional'", method)
    steps = checked_spacing(spacing_mm)
    stack = checked_stack(image, 16)
    values = stack[0] if len(stack) == 1 else stack.mean(axis=0)
    if float(np.ptp(values)) == 0:
        return NotMeasured("all pixels of the box are equal", "draw it across an edge")
    line = locate_edge(values, steps)
    if isinstance(line, NotMeasured):
        return line
    facts = _facts(values, steps, line)
    refusal = edge_refusal(facts, method, limits, stack)
    if refusal is not None:
        return refusal
    moved = check_slices(stack, line) if len(stack) > 1 else []
    if isinstance(moved, NotMeasured):
        return moved
    spectrum = residual_spectrum(line.residual, steps)
    spread, shape = measure_esf(_data(facts, line, spectrum), method, unit)
    numbers, cautions = curve_numbers(
        spread, max(steps), levels=levels, slope_over=0.05 if method == "fitted" else 0.2
    )
    f50 = numbers["f50"]
    if isinstance(f50, Quantity) and f50.uncertainty and f50.uncertainty > 0.3 * f50.value:
        return NotMeasured(
            f"noise leaves f50 uncertain by {100 * f50.uncertainty / f50.value:.0f} %",
            "measure a stronger contrast, a longer edge, or more slices",
        )
    cautions = [*edge_cautions(facts), *moved, *cautions]
    fields: dict[str, Any] = numbers | _line_numbers(line, facts, spectrum)
    fields |= noise_numbers(facts.noise, spectrum.independent(values.shape), shape.contrast)
    return EdgeMtf(
        **fields,
        width=shape.width,
        overshoot=shape.overshoot,
        esf=shape.esf,
        lsf=shape.lsf,
        method=method,
        cautions=tuple(cautions),
    )


def _facts(values: Floats, steps: tuple[float, float], line: EdgeLine) -> EdgeFacts:
    fwhm = 2.3548 * line.sigma
    pixel = max(steps)
    # the half-width within which every distance is met by a fair share of rows
    bins = bin_by_distance(
        line.distance.ravel(),
        values.ravel(),
        pixel / 2,
        half=float(np.abs(line.distance).max()),
        least_share=0.5,
    )
    dense = bin_by_distance(line.distance.ravel(), values.ravel(), pixel / 10, half=3 * fwhm)
    return EdgeFacts(
        values=values,
        spacing_mm=steps,
        line=line,
        fwhm=fwhm,
        reach=(-float(bins.distance[0]), float(bins.distance[-1])),
        dense=dense,
        contrast=float(line.rough.value[-1] - line.rough.value[0])
        - 2 * line.rough.grid[-1] * _common_slope(line),
        noise=float(np.sqrt(np.mean(line.residual**2))),
        slope=_common_slope(line),
    )


def _common_slope(line: EdgeLine) -> float:
    """Return the plateaus' slope: the rough edge's far ends have no other."""
    grid, value = line.rough.grid, line.rough.value
    tail = max(2, len(grid) // 20)
    left = (value[tail] - value[0]) / (grid[tail] - grid[0])
    right = (value[-1] - value[-1 - tail]) / (grid[-1] - grid[-1 - tail])
    return float((left + right) / 2)


def _data(facts: EdgeFacts, line: EdgeLine, spectrum: NoiseSpectrum) -> EsfData:
    return EsfData(
        distance=line.distance.ravel(),
        value=facts.values.ravel(),
        sigma=line.sigma,
        reach=facts.reach,
        bin_width=facts.bin_width(),
        gap=facts.dense.largest_gap(3 * facts.fwhm),
        contrast=facts.contrast,
        pixel_mm=max(facts.spacing_mm),
        spectrum=spectrum,
        normals=np.array([line.angle]),
        length=line.length,
    )


def _line_numbers(line: EdgeLine, facts: EdgeFacts, spectrum: NoiseSpectrum) -> dict[str, object]:
    u_offset, u_angle = (float(u) for u in jacobian_doubt(line.jacobian, spectrum, 2))
    screen = -math.degrees(line.angle)  # +y points down, angles count upwards
    ny, nx = facts.values.shape
    dy, dx = facts.spacing_mm
    middle = np.array([(ny - 1) / 2 * dy, (nx - 1) / 2 * dx])
    normal = np.array([math.sin(line.angle), math.cos(line.angle)])
    along = np.array([math.cos(line.angle), -math.sin(line.angle)])
    foot = middle + line.offset * normal
    near = np.abs(line.distance) <= 2 * line.sigma
    ends = [foot + float(t) * along for t in (line.along[near].min(), line.along[near].max())]
    return {
        "angle": Quantity(facts.tilt, "°", math.degrees(u_angle)),
        "normal_direction": Quantity(screen % 180.0, "°", math.degrees(u_angle)),
        "position": Quantity(line.offset, "mm", u_offset),
        "ends_mm": tuple((float(p[0]), float(p[1])) for p in ends),
    }
