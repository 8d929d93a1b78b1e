"""Solid objects in mm, and the plane figures a slice of given profile sees of them.

An object answers :meth:`Solid.pieces` with weighted figures: the weighted sum of their line
integrals is the object's line integral averaged along z with the slice profile. Straight objects
give one figure whose weight is exact; leaning ones and spheres are cut into sub-slices.

z runs along the slice normal, y down the image, x to the right.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol, TypeAlias

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.regions import direction
from ct_measure_plugin.virtual_scanner.sections import Ellipse, Polygon, Section, box

if TYPE_CHECKING:
    from ct_measure_plugin.virtual_scanner.slice_profile import SliceProfile

__all__ = [
    "Bead",
    "Leaning",
    "Piece",
    "Solid",
    "Straight",
    "block",
    "disc_rod",
    "elliptic_cylinder",
    "ramp_strip",
    "tilted_wire",
]

Point: TypeAlias = tuple[float, float]
Extent: TypeAlias = tuple[float, float]

EVERYWHERE: Extent = (-math.inf, math.inf)


@dataclass(frozen=True, slots=True)
class Piece:
    """A plane figure and its share in the slice."""

    weight: float
    section: Section


class Solid(Protocol):
    """What the projector asks of an object."""

    def pieces(self, profile: SliceProfile, z_mm: float) -> tuple[Piece, ...]:
        """Return what a slice at `z_mm` sees."""

    def at(self, z_mm: float) -> Section | None:
        """Return the cut of the plane z, or None if it misses the object."""


def _checked(extent: Extent) -> None:
    if not extent[0] < extent[1]:
        raise ArgumentError("z_mm", "must be (low, high) with low < high", extent)


@dataclass(frozen=True, slots=True)
class Straight:
    """A figure drawn out along z between two ends.

    Parameters
    ----------
    section : Section
        The figure.
    z_mm : (float, float)
        Its ends; infinite by default.
    """

    section: Section
    z_mm: Extent = EVERYWHERE

    def __post_init__(self) -> None:
        _checked(self.z_mm)

    def pieces(self, profile: SliceProfile, z_mm: float) -> tuple[Piece, ...]:
        """Return what a slice at `z_mm` sees."""
        weight = profile.share(self.z_mm[0] - z_mm, self.z_mm[1] - z_mm)
        return (Piece(weight, self.section),) if weight > 0 else ()

    def at(self, z_mm: float) -> Section | None:
        """Return the cut of the plane z, or None if it misses the object."""
        return self.section if self.z_mm[0] <= z_mm <= self.z_mm[1] else None


@dataclass(frozen=True, slots=True)
class Leaning:
    """A figure whose position moves in proportion to z: a tilted wire, a ramp.

    Parameters
    ----------
    section : Section
        The cut of the plane `pivot_mm`.
    shift : (float, float)
        dy/dz and dx/dz.
    pivot_mm : float
        The z at which the figure stands where it is drawn.
    z_mm : (float, float)
        Its ends.
    step_mm : float
        Largest in-plane move between two sub-slices.

    Notes
    -----
    Sub-slices of equal thickness h take the profile's exact share over their thickness. Their
    spread multiplies the object's own spectrum along its path by sinc(f·step), which for the
    default 0.1 mm is above 0.983 up to 1 mm⁻¹.
    """

    section: Section
    shift: Point
    pivot_mm: float = 0.0
    z_mm: Extent = EVERYWHERE
    step_mm: float = 0.1

    def __post_init__(self) -> None:
        _checked(self.z_mm)
        if not self.step_mm > 0:
            raise ArgumentError("step_mm", "must be greater than 0", self.step_mm)

    def _moved(self, z_mm: float) -> Section:
        run = z_mm - self.pivot_mm
        return self.section.moved(run * self.shift[0], run * self.shift[1])

    def pieces(self, profile: SliceProfile, z_mm: float) -> tuple[Piece, ...]:
        """Return what a slice at `z_mm` sees."""
        low = max(self.z_mm[0], z_mm - profile.reach_mm)
        high = min(self.z_mm[1], z_mm + profile.reach_mm)
        if low >= high:
            return ()
        travel = (high - low) * math.hypot(*self.shift)
        edges = np.linspace(low, high, max(1, math.ceil(travel / self.step_mm)) + 1).tolist()
        found = []
        for start, end in itertools.pairwise(edges):
            weight = profile.share(start - z_mm, end - z_mm)
            if weight > 0:
                found.append(Piece(weight, self._moved(0.5 * (start + end))))
        return tuple(found)

    def at(self, z_mm: float) -> Section | None:
        """Return the cut of the plane z, or None if it misses the object."""
        return self._moved(z_mm) if self.z_mm[0] <= z_mm <= self.z_mm[1] else None


@dataclass(frozen=True, slots=True)
class Bead:
    """A sphere.

    Parameters
    ----------
    centre_mm : (float, float, float)
        z, y, x.
    radius_mm : float
        Greater than 0.
    layers : int
        Number of sub-slices; the volume they hold is exact, because each is a disc of the
        sphere's own volume within its thickness.
    """

    centre_mm: tuple[float, float, float]
    radius_mm: float
    layers: int = 16

    def __post_init__(self) -> None:
        if not 0 < self.radius_mm < math.inf:
            raise ArgumentError("radius_mm", "must be greater than 0", self.radius_mm)
        if self.layers < 1:
            raise ArgumentError("layers", "must be at least 1", self.layers)

    def pieces(self, profile: SliceProfile, z_mm: float) -> tuple[Piece, ...]:
        """Return what a slice at `z_mm` sees."""
        z0, cy, cx = self.centre_mm
        r = self.radius_mm
        edges = np.linspace(-r, r, self.layers + 1)
        below = r**2 * edges - edges**3 / 3.0
        mean_square = np.diff(below) / np.diff(edges)  # of the discs' radii over each layer
        found = []
        for start, end, square in zip(edges, edges[1:], mean_square, strict=False):
            weight = profile.share(float(z0 + start - z_mm), float(z0 + end - z_mm))
            radius = math.sqrt(max(float(square), 0.0))
            if weight > 0 and radius > 0:
                found.append(Piece(weight, Ellipse((cy, cx), (radius, radius))))
        return tuple(found)

    def at(self, z_mm: float) -> Section | None:
        """Return the cut of the plane z, or None if it misses the object."""
        square = self.radius_mm**2 - (z_mm - self.centre_mm[0]) ** 2
        if square <= 0:
            return None
        radius = math.sqrt(square)
        return Ellipse(self.centre_mm[1:], (radius, radius))


def disc_rod(centre_mm: Point, radius_mm: float, z_mm: Extent = EVERYWHERE) -> Straight:
    """Return a round rod or cylinder along z; `centre_mm` is y, x."""
    return Straight(Ellipse(centre_mm, (radius_mm, radius_mm)), z_mm)


def elliptic_cylinder(
    centre_mm: Point,
    semi_axes_mm: tuple[float, float],
    *,
    angle_deg: float = 0.0,
    z_mm: Extent = EVERYWHERE,
) -> Straight:
    """Return a cylinder of elliptic section along z, rotated by an angle."""
    return Straight(Ellipse(centre_mm, semi_axes_mm, angle_deg), z_mm)


def block(
    centre_mm: Point,
    size_mm: tuple[float, float],
    *,
    angle_deg: float = 0.0,
    z_mm: Extent = EVERYWHERE,
) -> Straight:
    """Return a box along z whose edges lean by an angle; `size_mm` is length, width."""
    return Straight(box(centre_mm, size_mm, angle_deg), z_mm)


def tilted_wire(
    point_mm: tuple[float, float, float],
    diameter_mm: float,
    *,
    tilt_deg: float,
    towards_deg: float = 0.0,
    z_mm: Extent = EVERYWHERE,
) -> Leaning:
    """Return a straight wire that leans away from z.

    Parameters
    ----------
    point_mm : (float, float, float)
        z, y, x of a point on its axis.
    diameter_mm : float
        Of the wire.
    tilt_deg : float
        Angle to z, 0 <= tilt < 80.
    towards_deg : float
        In-plane direction in which it moves with z, counter-clockwise from +x.
    z_mm : (float, float)
        Its ends.

    Notes
    -----
    Every plane z cuts an ellipse, longer by 1/cos(tilt) along the lean.
    """
    if not 0 <= tilt_deg < 80:
        raise ArgumentError("tilt_deg", "must lie in 0 <= tilt < 80", tilt_deg)
    z0, cy, cx = point_mm
    tilt = math.radians(tilt_deg)
    uy, ux = direction(towards_deg)
    radius = 0.5 * diameter_mm
    cut = Ellipse((cy, cx), (radius / math.cos(tilt), radius), towards_deg)
    slope = math.tan(tilt)
    step = min(0.1, 0.5 * diameter_mm) if tilt_deg else 0.1
    return Leaning(cut, (slope * uy, slope * ux), z0, z_mm, step)


def ramp_strip(
    point_mm: tuple[float, float, float],
    *,
    thickness_mm: float,
    width_mm: float,
    angle_deg: float,
    towards_deg: float = 0.0,
    z_mm: Extent = EVERYWHERE,
) -> Leaning:
    """Return a thin flat strip inclined to the scan plane.

    Parameters
    ----------
    point_mm : (float, float, float)
        z, y, x of the strip's middle.
    thickness_mm : float
        Of the strip, across its face.
    width_mm : float
        In-plane, across the direction in which it climbs.
    angle_deg : float
        Between the strip and the scan plane, 5 to 85: a length s along the slice stands for
        z = s tan(angle).
    towards_deg : float
        In-plane direction in which it climbs, counter-clockwise from +x.
    z_mm : (float, float)
        Its ends.
    """
    if not 5 <= angle_deg <= 85:
        raise ArgumentError("angle_deg", "must lie within 5 to 85", angle_deg)
    z0, cy, cx = point_mm
    angle = math.radians(angle_deg)
    length = thickness_mm / math.sin(angle)
    uy, ux = direction(towards_deg)
    cut: Polygon = box((cy, cx), (length, width_mm), towards_deg)
    slope = 1.0 / math.tan(angle)
    return Leaning(cut, (slope * uy, slope * ux), z0, z_mm, min(0.1, 0.5 * length))
