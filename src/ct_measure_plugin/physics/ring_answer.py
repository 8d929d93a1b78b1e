"""What a search for rings answers."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.results import Caution, Curve, Picture, Quantity, Result
from ct_measure_plugin.physics.ring_layers import Deviations, Layer
from ct_measure_plugin.physics.ring_polar import SECTORS

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.physics.ring_polar import Polar, Sight
    from ct_measure_plugin.physics.ring_search import Ring, Search

    Floats = NDArray[np.float64]

__all__ = ["RingArtefact", "RingReading", "assembled"]

#: Steps to either side of the strongest ring that tell a slice's noise.
BAND = 40

#: Less likely than this, 400 drawn fields cannot tell.
LEAST_CHANCE = 1e-5

#: A normal distribution's 95th percentile, in standard deviations.
ONE_SIDED = 1.645


@dataclass(frozen=True, slots=True)
class RingReading:
    """One ring or arc that stands out of the noise.

    Attributes
    ----------
    radius : Quantity
        Of its middle.
    amplitude : Quantity
        Mean over its width, along the arc, minus its surroundings.
    arc : Quantity
        Its length, percent of the circle, to about ± 10 %.
    first_azimuth : Quantity
        Where it begins, counter-clockwise on the screen from +x.
    significance : Quantity
        Amplitude over its uncertainty, at the width and behind the filter that show it best.
    chance : Quantity
        Probability, in percent, that noise makes one as strong anywhere in the region.
    """

    radius: Quantity
    amplitude: Quantity
    arc: Quantity
    first_azimuth: Quantity
    significance: Quantity
    chance: Quantity


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RingArtefact(Result):
    """Rings about the rotation centre.

    Attributes
    ----------
    ring_index : Quantity
        Root mean square, over the radius, of the amplitude in excess of what noise makes of it.
    worst_radius, worst_amplitude, worst_arc : Quantity
        Of the strongest ring or arc, real or not.
    significance : Quantity
        Its amplitude over its uncertainty.
    chance : Quantity
        Probability, in percent, that noise makes one as strong anywhere in the region.
    rings_found : Quantity
        Number of rings that noise makes in less than one search of twenty.
    rings : tuple of RingReading
        These, strongest first.
    threshold : Quantity
        Significance that noise exceeds in one search of twenty.
    amplitude : Curve
        Mean over the circle, a pixel wide, minus that over four pixels on either side, by radius;
        its uncertainty is what noise makes of it.
    radial_mean : Curve
        Mean over the circle by radius.
    worst_along_z : Curve
        Amplitude of the strongest ring's arc, slice by slice.
    center_y, center_x : Curve
        The rotation centre that was used, in mm.
    ring_map : Picture
        What the rings that were found add to the image, as they were fitted.
    polar_mean, polar_deviation : Picture
        Means by radius and azimuth; the same minus their surroundings along the radius.
    """

    ring_index: Quantity
    worst_radius: Quantity
    worst_amplitude: Quantity
    worst_arc: Quantity
    significance: Quantity
    chance: Quantity
    rings_found: Quantity
    rings: tuple[RingReading, ...] = ()
    threshold: Quantity
    amplitude: Curve
    radial_mean: Curve
    worst_along_z: Curve
    center_y: Curve
    center_x: Curve
    ring_map: Picture
    polar_mean: Picture
    polar_deviation: Picture


def assembled(
    planes: Sequence[NDArray[np.generic]] | NDArray[np.generic],
    sight: Sight,
    polar: Polar,
    looked: Search,
    z: Floats,
    tried: int,
    unit: str,
) -> RingArtefact:
    """Return the answer of a search in the slices that were averaged for it."""
    known = np.isfinite(looked.amplitude)
    radius, amplitude = polar.radius_mm[known], looked.amplitude[known]
    doubt = looked.doubt[known]
    worst = _reading(polar, looked.worst, tried, unit)
    rings = tuple(_reading(polar, ring, tried, unit) for ring in looked.rings)
    pixels = polar.count.sum(axis=1)
    held = pixels > 0
    circle = np.sum(polar.means * polar.count, axis=1)[held] / pixels[held]
    return RingArtefact(
        ring_index=_index(amplitude, doubt, looked.repeats, unit),
        worst_radius=worst.radius,
        worst_amplitude=worst.amplitude,
        worst_arc=worst.arc,
        significance=worst.significance,
        chance=worst.chance,
        rings_found=Quantity(float(len(rings)), "", 0.0),
        rings=rings,
        threshold=Quantity(looked.threshold, "", 0.1),
        amplitude=Curve(radius, amplitude, doubt, "radius", "mm", "amplitude", unit),
        radial_mean=Curve(
            polar.radius_mm[held], circle, None, "radius", "mm", "mean over the circle", unit
        ),
        worst_along_z=_along_z(planes, sight, polar, looked.worst, z, unit),
        center_y=Curve(z, np.full(len(z), sight.center_mm[0]), None, "z", "mm", "y", "mm"),
        center_x=Curve(z, np.full(len(z), sight.center_mm[1]), None, "z", "mm", "x", "mm"),
        polar_mean=_picture(polar, polar.means, unit),
        polar_deviation=_picture(polar, looked.deviation, unit),
        ring_map=_map(sight, looked.fitted, unit),
        cautions=_cautions(rings),
    )


def _reading(polar: Polar, ring: Ring, tried: int, unit: str) -> RingReading:
    # cores lie on half pixels: a ring up to half a step off leaves that share of them empty
    off = abs(ring.amplitude) * 0.5 / ring.core / math.sqrt(3.0)
    return RingReading(
        radius=Quantity(
            float(polar.radius_mm[ring.place]), "mm", ring.core * polar.step_mm / math.sqrt(12.0)
        ),
        amplitude=Quantity(ring.amplitude, unit, math.hypot(ring.doubt, off)),
        arc=Quantity(100.0 * ring.arc / SECTORS, "%", 10.0),
        first_azimuth=Quantity(360.0 * ring.start / SECTORS, "°", 360.0 / SECTORS),
        significance=Quantity(ring.score, "", 1.0),
        chance=_chance(min(ring.chance * tried, 1.0)),
    )


def _chance(chance: float) -> Quantity:
    """Return a chance in percent with its uncertainty.

    Drawn fields fix the expected number of such rings, −ln(1 − chance), to a quarter. What they
    cannot tell from 0 is the middle of a rectangular distribution (JCGM 100:2008, 4.3.7).

    >>> str(_chance(1e-90)), str(_chance(0.02)), str(_chance(0.97))
    ('0.00050 ± 0.00029 %', '2.00 ± 0.49 %', '97.0 ± 2.6 %')
    """
    if chance < LEAST_CHANCE:
        half = 100.0 * LEAST_CHANCE / 2
        return Quantity(half, "%", half / math.sqrt(3.0))
    left = max(1.0 - chance, 0.01)
    return Quantity(100.0 * chance, "%", 25.0 * left * -math.log(left))


def _index(amplitude: Floats, doubt: Floats, repeats: float, unit: str) -> Quantity:
    """Return the root of the mean squared amplitude less what noise makes of it.

    Its uncertainty is that of the mean square e ± s, on the lower side of the root: what is below
    95 % of the cases without a ring has an interval that holds 0.
    """
    excess = float(np.mean(amplitude**2 - doubt**2))
    spread = math.sqrt(
        repeats * float(np.sum(2.0 * doubt**4 + 4.0 * np.maximum(excess, 0.0) * doubt**2))
    ) / len(doubt)
    most = max(excess, ONE_SIDED * spread)
    u = (math.sqrt(most) - math.sqrt(most - ONE_SIDED * spread)) / ONE_SIDED
    return Quantity(math.sqrt(max(excess, 0.0)), unit, u)


def _along_z(
    planes: Sequence[NDArray[np.generic]] | NDArray[np.generic],
    sight: Sight,
    polar: Polar,
    ring: Ring,
    z: Floats,
    unit: str,
) -> Curve:
    """Return the strongest ring's level in every slice, each with the noise around it."""
    rows = np.arange(max(ring.place - BAND, 0), min(ring.place + BAND + 1, sight.steps))
    place = int(np.flatnonzero(rows == ring.place)[0])
    band = replace(
        polar,
        means=polar.means[rows],
        count=polar.count[rows],
        radius_mm=polar.radius_mm[rows],
        group=polar.group[rows],
    )
    layer = Layer(band, ring.core)
    sectors = (ring.start + np.arange(ring.arc)) % SECTORS
    weight = max(float(layer.weight[place, sectors].sum()), 1.0)
    level, doubt = [], []
    for plane in planes:
        plain = Deviations(layer, sight.means(np.asarray(plane), rows)[None])
        level.append(float(plain.sums[0][place, sectors].sum()) / weight)
        doubt.append(float(plain.noise[0, place]) / math.sqrt(weight))
    return Curve(z, np.array(level), np.array(doubt), "z", "mm", "amplitude", unit)


def _map(sight: Sight, fitted: Floats, unit: str) -> Picture:
    values, origin = sight.spread(fitted)
    return Picture(values, sight.spacing_mm, ("y", "x"), ("mm", "mm"), unit, origin)


def _picture(polar: Polar, values: Floats, unit: str) -> Picture:
    step = 360.0 / SECTORS
    return Picture(
        values,
        (polar.step_mm, step),
        ("radius", "azimuth"),
        ("mm", "°"),
        unit,
        (float(polar.radius_mm[0]), step / 2),
    )


def _cautions(rings: tuple[RingReading, ...]) -> tuple[Caution, ...]:
    if not rings:
        return ()
    first = rings[0]
    more = f", and {len(rings) - 1} more" if len(rings) > 1 else ""
    return (
        Caution(
            "rings-found",
            f"A ring of {first.amplitude} at {first.radius} stands out of the noise{more}.",
            "Calibrate the detector (air calibration), and look again.",
        ),
    )
