"""Whether the edge of a rod can be measured, and what a reader must know of it."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.edge_checks import clipped, other_objects
from ct_measure_plugin.physics.results import Caution, NotMeasured, Quantity

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.circle_stack import CircleStack
    from ct_measure_plugin.physics.esf_measure import EsfData

    Floats = NDArray[np.float64]

__all__ = ["curvature_share", "disc_cautions", "disc_refusal"]

#: Radii below this many sigma are refused, below the second cautioned: there the correction for
#: curvature is 1 % and 0.25 %.
SMALL_RADIUS, FAIR_RADIUS = 5.0, 10.0

#: Share of the radius by which it may vary as cos 2φ; so much is followed without visible blur.
MOST_OVAL = 0.06

#: Least contrast to noise times the root of the number of pixels on one FWHM of edge.
LEAST_SIGNAL, FAIR_SIGNAL = 15.0, 100.0

#: Degrees by which a rod may lean without a caution.
MOST_LEAN = 2.0

#: Rise of the surroundings across the rod, in contrasts, that is cautioned; and how many of its
#: standard errors in white noise it has to stand out by.
MOST_RISE, STANDS_OUT = 0.03, 5.0

#: Widest gap between samples across the edge, in FWHM: a Gaussian's MTF is 0.12 at their Nyquist.
MOST_GAP = 0.65

#: Below so much of the same an odd shape is more likely noise than the object's own.
SHAPE_SIGNAL = 40.0

#: Plateaus shorter than this many FWHM are refused, shorter than the second cautioned.
SHORT_PLATEAU, FAIR_PLATEAU = 2.0, 4.0


def _signal(data: EsfData, noise: float) -> float:
    pixels = data.length * data.fwhm / data.pixel_mm**2
    return abs(data.contrast) / noise * math.sqrt(pixels) if noise > 0 else math.inf


def curvature_share(rod: CircleStack) -> float:
    """Return by what share frequencies read low at the edge of a disc: (sigma / radius)² / 4.

    Exact to second order for a Gaussian; of other kernels it takes the greater part.
    """
    return float((rod.sigma / rod.middle.annulus.radius) ** 2 / 4)


def disc_refusal(
    stack: Floats,
    rod: CircleStack,
    data: EsfData,
    limits: tuple[float, float] | None,
    radius_doubt: float,
) -> NotMeasured | None:
    """Return why the edge cannot be measured, or None; `radius_doubt` is the radius's own."""
    contrast, noise, circle = abs(data.contrast), rod.noise, rod.middle
    cut = clipped(stack, circle.annulus.distance, data.fwhm, limits)
    if cut is not None:
        return cut
    faint = NotMeasured(
        f"the contrast is too low: {contrast:.3g} over a noise of {noise:.3g}",
        "pool more slices, or measure a stronger contrast",
    )
    signal = _signal(data, noise)
    if signal < LEAST_SIGNAL:
        return faint
    oval = math.hypot(*circle.annulus.harmonic)
    if oval > MOST_OVAL * circle.annulus.radius + 4 * radius_doubt:
        return (
            faint
            if signal < SHAPE_SIGNAL
            else NotMeasured(
                f"the object is not round: its radius varies by {oval:.2g} mm",
                "measure a round rod, or its edge in a box",
            )
        )
    if circle.annulus.radius < SMALL_RADIUS * data.sigma:
        return (
            faint
            if signal < SHAPE_SIGNAL
            else NotMeasured(
                f"the radius, {circle.annulus.radius:.3g} mm, is less than {SMALL_RADIUS:g} sigma"
                " of the blur",
                "measure a thicker rod",
            )
        )
    if min(data.reach) < SHORT_PLATEAU * data.fwhm:
        return NotMeasured(
            f"less than {SHORT_PLATEAU:g} FWHM of even material lie beside the edge",
            "draw the box larger",
        )
    share = other_objects(circle.residual, contrast, circle.annulus.used)
    if share > 0.15:
        return NotMeasured(
            f"something else lies in the box: {100 * share:.0f} % of the contrast",
            "draw the box around the rod alone",
        )
    if data.gap > MOST_GAP * data.fwhm:
        return NotMeasured(
            f"the samples across the edge lie up to {data.gap:.2g} mm apart", "pool more slices"
        )
    return None


def disc_cautions(rod: CircleStack, data: EsfData, lean: Quantity | None) -> list[Caution]:
    """Return what a reader must know."""
    found = []
    circle = rod.middle
    radius, noise = circle.annulus.radius, rod.noise
    if radius < FAIR_RADIUS * data.sigma:
        found.append(
            Caution(
                "small-radius",
                f"The radius is {radius / data.sigma:.1f} sigma of the blur; frequencies were"
                f" raised by {100 * curvature_share(rod):.1f} % for its curvature.",
                "Measure a thicker rod.",
            )
        )
    if _signal(data, noise) < FAIR_SIGNAL:
        found.append(
            Caution(
                "low-contrast",
                f"Contrast to noise is {abs(data.contrast) / noise:.2g}, {_signal(data, noise):.2g}"
                " with the pixels of one FWHM of edge.",
                "Look at the uncertainties; pool more slices.",
            )
        )
    if min(data.reach) < FAIR_PLATEAU * data.fwhm:
        found.append(
            Caution(
                "tail-truncation",
                f"Only {min(data.reach) / data.fwhm:.1f} FWHM of even material lie beside the"
                " edge.",
                "Draw the box larger.",
            )
        )
    rise, doubt = _rise(rod)
    if rise > max(MOST_RISE * abs(data.contrast), STANDS_OUT * doubt):
        found.append(
            Caution(
                "background-gradient",
                f"Values rise by {100 * rise / abs(data.contrast):.1f} % of the contrast from one"
                " side of the rod to the other.",
                "Look for cupping, or a neighbour; sectors are the more affected.",
            )
        )
    share = other_objects(circle.residual, abs(data.contrast), circle.annulus.used)
    if share > 0.05:
        found.append(
            Caution(
                "another-object",
                f"Parts of the box depart from a disc by {100 * share:.1f} % of the contrast.",
                "Draw the box around the rod alone.",
            )
        )
    # noise alone leans a faint rod's centres: only what two of its uncertainties leave counts
    if lean is not None and lean.value - 2 * (lean.uncertainty or 0.0) > MOST_LEAN:
        found.append(
            Caution(
                "leaning-object",
                f"The object leans by {lean.value:.1f}°; each slice blurs it by its thickness"
                " times the tangent.",
                "Align the phantom with the scan axis.",
            )
        )
    return found


def _rise(rod: CircleStack) -> tuple[float, float]:
    """Return by how much the departures from the edge rise across the rod, and its error.

    A plane through the mean departures of all slices; the error is that in white noise.
    """
    annulus = rod.middle.annulus
    left = np.mean([one.residual for one in rod.circles], axis=0)[annulus.used]
    away = (annulus.radius - annulus.distance)[annulus.used]
    azimuth = annulus.azimuth[annulus.used]
    columns = np.stack([np.ones_like(away), away * np.sin(azimuth), away * np.cos(azimuth)])
    slope = np.linalg.lstsq(columns.T, left, rcond=None)[0][1:]
    error = float(left.std()) / math.sqrt(float(np.sum(columns[1:] ** 2)) / 2)
    across = 2 * annulus.radius
    return across * float(np.hypot(*slope)), across * error
