"""Rings about the rotation centre: how strong, where, and whether noise alone makes them."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.cylinder import find_cylinder
from ct_measure_plugin.physics.plane_stack import checked_inside, checked_planes, checked_positions
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.ring_answer import RingArtefact, RingReading, assembled
from ct_measure_plugin.physics.ring_polar import Sight, fault, to_polar
from ct_measure_plugin.physics.ring_search import search, strength

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
    planes = checked_planes(image, spacing_mm, least=32)
    z = checked_positions(z_mm, len(planes))
    if not 0 <= search_px <= 3:
        raise ArgumentError("search_px", "must be from 0 to 3", search_px)
    shape = (planes.shape[1], planes.shape[2])
    mask = _mask(planes, spacing_mm, z, inside)
    if isinstance(mask, NotMeasured):
        return mask
    middle = tuple((n - 1) / 2 * s for n, s in zip(shape, spacing_mm, strict=True))
    center = middle if center_mm is None else center_mm
    sight = Sight(mask, spacing_mm, (center[0], center[1]))
    wrong = fault(planes, sight) if sight.steps else None
    if wrong is not None:
        return wrong
    mean = np.mean([np.asarray(plane, dtype=float) for plane in planes], axis=0)
    tried = 1
    if search_px:
        sight, tried = _best_centre(mean, sight, search_px)
    polar = to_polar(mean, sight)
    if isinstance(polar, NotMeasured):
        return polar
    looked = search(polar, LEVEL / tried)
    if looked is None:
        return NotMeasured(
            "the region holds too few radial steps around the rotation centre",
            "draw it wider, at least 30 pixels from the inside to the outside",
        )
    return assembled(planes, sight, polar, looked, z, tried, unit)


def _mask(
    planes: NDArray[np.generic],
    spacing_mm: tuple[float, float],
    z: Floats,
    inside: ArrayLike | None,
) -> Flags | NotMeasured:
    shape = planes.shape[1:]
    if inside is not None:
        return checked_inside(inside, shape)
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


def _best_centre(mean: Floats, around: Sight, reach: int) -> tuple[Sight, int]:
    """Return the view from the centre, to a pixel, about which rings are strongest.

    And how many centres were tried.
    """
    best, where = -1.0, around
    dy, dx = around.spacing_mm
    shifts = [(a, b) for a in range(-reach, reach + 1) for b in range(-reach, reach + 1)]
    for a, b in sorted(shifts, key=lambda s: (s[0] ** 2 + s[1] ** 2, s)):
        center = (around.center_mm[0] + a * dy, around.center_mm[1] + b * dx)
        sight = Sight(around.inside, around.spacing_mm, center)
        polar = to_polar(mean, sight)
        score = 0.0 if isinstance(polar, NotMeasured) else strength(polar)
        if score > best:
            best, where = score, sight
    return where, len(shifts)
