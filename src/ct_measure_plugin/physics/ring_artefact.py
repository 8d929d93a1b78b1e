"""Rings about the rotation centre: how strong, where, and whether noise alone makes them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.cylinder import find_cylinder
from ct_measure_plugin.physics.results import Caution, Curve, NotMeasured, Picture, Quantity, Result
from ct_measure_plugin.physics.ring_layers import Deviations, Layer
from ct_measure_plugin.physics.ring_polar import SECTORS, Polar, to_polar
from ct_measure_plugin.physics.ring_search import Ring, Search, search, strength

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]
    Flags = NDArray[np.bool_]

__all__ = ["RingArtefact", "RingReading", "ring_artefact"]

#: Share of a found cylinder's radius that is looked at.
FIELD = 0.9

#: Probability of calling noise a ring.
LEVEL = 0.05


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
        Mean over the circle minus the mean over four steps on either side, by radius; its
        uncertainty is what noise makes of it.
    radial_mean : Curve
        Mean over the circle by radius.
    worst_along_z : Curve
        Amplitude of the strongest ring's arc, slice by slice.
    center_y, center_x : Curve
        The rotation centre that was used, in mm.
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
    polar_mean: Picture
    polar_deviation: Picture


def ring_artefact(
    image: ArrayLike,
    *,
    spacing_mm: tuple[float, float],
    z_mm: Sequence[float] | None = None,
    center_mm: tuple[float, float] | None = None,
    inside: ArrayLike | None = None,
    search_px: int = 0,
    unit: str = "HU",
) -> RingArtefact | NotMeasured:
    """Return the rings in slices of uniform material.

    Parameters
    ----------
    image : array, shape (ny, nx) or (nz, ny, nx)
        Slices; they are averaged for the search, so that more of them show fainter rings.
    spacing_mm : (float, float)
        dy and dx.
    z_mm : sequence of float, optional
        Position of each slice; by default 0, 1, 2 and so on.
    center_mm : (float, float), optional
        y and x of the rotation centre, from the centre of pixel (0, 0); by default the middle of
        the image, where it lies unless the reconstruction was shifted.
    inside : array of bool, shape (ny, nx), optional
        The pixels of uniform material; by default 0.9 of the radius of the cylinder that is found.
    search_px : int
        The rotation centre is looked for within so many pixels of the given one, 0 to 3.
    unit : str
        Of the values.

    Returns
    -------
    RingArtefact or NotMeasured
        NotMeasured if the region holds an object, or too few radial steps.

    Raises
    ------
    ArgumentError
        On misuse.

    Notes
    -----
    There is no standard measure of rings; this one is the project's own. See `ring_search` for the
    search and `ring_polar` for the coordinates.

    Examples
    --------
    >>> y, x = np.mgrid[:128, :128] - 63.5
    >>> r = np.hypot(y, x)
    >>> noise = np.random.default_rng(1).normal(0, 10, (128, 128))
    >>> ring = 8.0 * (abs(r - 40) < 1)
    >>> found = ring_artefact(noise + ring, spacing_mm=(1.0, 1.0), inside=r < 62)
    >>> found.rings_found.value, abs(found.worst_radius.value - 40) < 2
    (1.0, True)
    """
    planes, z = _checked(image, spacing_mm, z_mm)
    if not 0 <= search_px <= 3:
        raise ArgumentError("search_px", "must be from 0 to 3", search_px)
    shape = (planes.shape[1], planes.shape[2])
    mask = _mask(planes, spacing_mm, z, inside)
    if isinstance(mask, NotMeasured):
        return mask
    center = center_mm or tuple((n - 1) / 2 * s for n, s in zip(shape, spacing_mm, strict=True))
    tried = 1
    if search_px:
        found = _center(planes, spacing_mm, (center[0], center[1]), mask, search_px)
        if isinstance(found, NotMeasured):
            return found
        center, tried = found
    polar = to_polar(planes, spacing_mm=spacing_mm, center_mm=(center[0], center[1]), inside=mask)
    if isinstance(polar, NotMeasured):
        return polar
    looked = search(polar, polar.means.mean(axis=0), LEVEL / tried)
    if looked is None:
        return NotMeasured(
            "the region holds too few radial steps around the rotation centre",
            "draw it wider, at least 30 pixels from the inside to the outside",
        )
    return _assembled(polar, looked, z, (center[0], center[1]), tried, unit)


def _checked(
    image: ArrayLike, spacing_mm: tuple[float, float], z_mm: Sequence[float] | None
) -> tuple[NDArray[np.generic], Floats]:
    # lazy arrays stay what they are, and are read slice by slice
    data: NDArray[np.generic] = image if hasattr(image, "dtype") else np.asarray(image)  # type: ignore[assignment]
    if data.ndim == 2:
        data = data[None]
    if data.ndim != 3 or data.dtype.kind not in "iuf" or min(data.shape[1:]) < 32:
        raise ArgumentError("image", "must have shape (ny, nx) or (nz, ny, nx)", data.shape)
    steps = tuple(float(s) for s in spacing_mm)
    if len(steps) != 2 or not all(0 < s < math.inf for s in steps):
        raise ArgumentError("spacing_mm", "must hold 2 lengths greater than 0", spacing_mm)
    z = np.arange(len(data), dtype=float) if z_mm is None else np.asarray(z_mm, dtype=float)
    if z.shape != (len(data),):
        raise ArgumentError("z_mm", f"must hold {len(data)} positions", z.shape)
    return data, z


def _mask(
    planes: NDArray[np.generic],
    spacing_mm: tuple[float, float],
    z: Floats,
    inside: ArrayLike | None,
) -> Flags | NotMeasured:
    shape = planes.shape[1:]
    if inside is not None:
        mask = np.asarray(inside)
        if mask.shape != shape or mask.dtype != bool:
            raise ArgumentError("inside", f"must be of bool and have shape {shape}", mask.shape)
        return mask
    found = find_cylinder(planes, spacing_mm=spacing_mm, z_mm=z)
    if isinstance(found, NotMeasured):
        return found
    y = np.arange(shape[0])[:, None] * spacing_mm[0]
    x = np.arange(shape[1])[None, :] * spacing_mm[1]
    reach = FIELD * found.radius_mm
    mask = np.ones(shape, dtype=bool)
    for center in found.centers_mm if found.moves else found.centers_mm[:1]:
        mask &= np.hypot(y - center[0], x - center[1]) <= reach
    return mask


def _center(
    planes: NDArray[np.generic],
    spacing_mm: tuple[float, float],
    around: tuple[float, float],
    mask: Flags,
    reach: int,
) -> tuple[tuple[float, float], int] | NotMeasured:
    """Return the centre, to a pixel, about which rings are strongest, and how many were tried."""
    mean = np.mean([np.asarray(plane, dtype=float) for plane in planes], axis=0)
    best, where = -1.0, around
    shifts = [(a, b) for a in range(-reach, reach + 1) for b in range(-reach, reach + 1)]
    for a, b in sorted(shifts, key=lambda s: (s[0] ** 2 + s[1] ** 2, s)):
        center = (around[0] + a * spacing_mm[0], around[1] + b * spacing_mm[1])
        polar = to_polar([mean], spacing_mm=spacing_mm, center_mm=center, inside=mask)
        if isinstance(polar, NotMeasured):
            return polar
        score = strength(polar, polar.means[0])
        if score > best:
            best, where = score, center
    return where, len(shifts)


def _assembled(
    polar: Polar,
    looked: Search,
    z: Floats,
    center: tuple[float, float],
    tried: int,
    unit: str,
) -> RingArtefact:
    known = np.isfinite(looked.amplitude)
    radius, amplitude = polar.radius_mm[known], looked.amplitude[known]
    doubt = looked.doubt[known]
    worst = _reading(polar, looked.worst, tried, unit)
    rings = tuple(_reading(polar, ring, tried, unit) for ring in looked.rings)
    pixels = polar.count.sum(axis=1)
    held = pixels > 0
    circle = np.sum(polar.means.mean(axis=0) * polar.count, axis=1)[held] / pixels[held]
    return RingArtefact(
        ring_index=_index(amplitude, doubt, unit),
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
        worst_along_z=_along_z(polar, looked.worst, z, unit),
        center_y=Curve(z, np.full(len(z), center[0]), None, "z", "mm", "y", "mm"),
        center_x=Curve(z, np.full(len(z), center[1]), None, "z", "mm", "x", "mm"),
        polar_mean=_picture(polar, polar.means.mean(axis=0), unit),
        polar_deviation=_picture(polar, looked.deviation, unit),
        cautions=_cautions(rings),
    )


def _reading(polar: Polar, ring: Ring, tried: int, unit: str) -> RingReading:
    chance = min(ring.chance * tried, 1.0)
    return RingReading(
        radius=Quantity(
            float(polar.radius_mm[ring.step]), "mm", ring.core * polar.step_mm / math.sqrt(12.0)
        ),
        amplitude=Quantity(ring.amplitude, unit, ring.doubt),
        arc=Quantity(100.0 * ring.arc / SECTORS, "%", 10.0),
        first_azimuth=Quantity(360.0 * ring.start / SECTORS, "°", 360.0 / SECTORS),
        significance=Quantity(ring.score, "", 1.0),
        chance=Quantity(100.0 * chance, "%", 25.0 * chance),  # drawn fields fix it to a quarter
    )


def _index(amplitude: Floats, doubt: Floats, unit: str) -> Quantity:
    """Return the root of the mean squared amplitude less what noise makes of it.

    Neighbouring radii share pixels: the mean counts as one of a third as many.
    """
    excess = float(np.mean(amplitude**2 - doubt**2))
    spread = math.sqrt(
        3.0 * float(np.sum(2.0 * doubt**4 + 4.0 * np.maximum(excess, 0.0) * doubt**2))
    ) / len(doubt)
    index = math.sqrt(max(excess, 0.0))
    floor = math.sqrt(spread)
    return Quantity(index, unit, spread / (2.0 * max(index, floor / 2.0)) if floor > 0 else 0.0)


def _along_z(polar: Polar, ring: Ring, z: Floats, unit: str) -> Curve:
    """Return the strongest ring's level in every slice, each with its own noise."""
    layer = Layer(polar, ring.core)
    sectors = (ring.start + np.arange(ring.arc)) % SECTORS
    level, doubt = [], []
    for means in polar.means:
        plain = Deviations(layer, means[None])
        weight = max(float(layer.weight[ring.place, sectors].sum()), 1.0)
        level.append(float(plain.sums[0][ring.place, sectors].sum()) / weight)
        doubt.append(float(plain.noise[0, ring.place]) / math.sqrt(weight))
    return Curve(z, np.array(level), np.array(doubt), "z", "mm", "amplitude", unit)


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
