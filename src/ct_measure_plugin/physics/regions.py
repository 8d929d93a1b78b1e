"""Regions: shapes in millimetres, on one slice, over a slice range, or on every slice.

The frame is the *image frame* of a Volume: z along the slice normal, y down the rows, x along the
columns, in mm. For a DICOM series it is the patient frame seen along the image's own axes, so a
region drawn on one reconstruction measures another of different field of view; for a plain array
its origin is the centre of voxel (0, 0, 0).

Angles are degrees counter-clockwise as seen on the screen, from +x, with +y pointing down.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, ClassVar

import numpy as np

from ct_measure_plugin.errors import RegionError
from ct_measure_plugin.physics.path_pieces import pieces_of
from ct_measure_plugin.physics.region_base import (
    LONGEST_CODE,
    Point,
    Region,
    as_point,
    finite,
    positive,
    set_points,
)
from ct_measure_plugin.physics.region_masks import Labels, Mask

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = [
    "LONGEST_CODE",
    "Box",
    "Disc",
    "Ellipse",
    "Ellipsoid",
    "Labels",
    "Mask",
    "Path",
    "Polygon",
    "Region",
    "Segment",
    "direction",
]


def direction(angle_deg: float) -> Point:
    """Return the unit vector (y, x) at an angle counter-clockwise on the screen from +x.

    >>> direction(90.0) == (-1.0, math.cos(math.pi / 2))
    True
    """
    turn = math.radians(angle_deg)
    return -math.sin(turn), math.cos(turn)


@dataclass(frozen=True, slots=True)
class Disc(Region):
    """A disc; over a slice range, a cylinder.

    Attributes
    ----------
    center_mm : (float, float)
        y and x of the centre.
    radius_mm : float
        Radius.

    Examples
    --------
    >>> Disc((12.0, -3.5), 10.0, z_mm=40.0).area_mm2
    314.1592653589793
    """

    kind: ClassVar[str] = "disc"

    center_mm: Point
    radius_mm: float

    def __post_init__(self) -> None:
        Region.__post_init__(self)
        set_points(self, "center_mm")
        positive("radius_mm", self.radius_mm)

    @property
    def area_mm2(self) -> float:
        """Area in closed form."""
        return math.pi * self.radius_mm**2


@dataclass(frozen=True, slots=True)
class Ellipse(Region):
    """An ellipse.

    Attributes
    ----------
    center_mm : (float, float)
        y and x of the centre.
    radii_mm : (float, float)
        Semi-axis across and semi-axis along the direction `angle_deg`; at angle 0 they are the
        vertical and the horizontal one.
    angle_deg : float
        Direction of the second semi-axis.
    """

    kind: ClassVar[str] = "ellipse"

    center_mm: Point
    radii_mm: Point
    angle_deg: float = 0.0

    def __post_init__(self) -> None:
        Region.__post_init__(self)
        set_points(self, "center_mm")
        finite("angle_deg", self.angle_deg)
        set_points(self, "radii_mm")
        positive("radii_mm", *self.radii_mm)

    @property
    def area_mm2(self) -> float:
        """Area in closed form."""
        return math.pi * self.radii_mm[0] * self.radii_mm[1]


@dataclass(frozen=True, slots=True)
class Ellipsoid(Region):
    """An ellipsoid, a sphere if all its half axes are equal; one half axis is along z.

    Attributes
    ----------
    center_mm : (float, float)
        y and x of the centre; its z is `z_mm`.
    radii_mm : (float, float)
        As those of an :class:`Ellipse`: in the plane.
    z_radius_mm : float
        Half axis along z.
    angle_deg : float
        Direction of the second semi-axis, in the plane.

    Examples
    --------
    >>> round(Ellipsoid((0.0, 0.0), (5.0, 5.0), 5.0, z_mm=40.0).volume_mm3, 1)
    523.6
    """

    kind: ClassVar[str] = "ellipsoid"

    center_mm: Point
    radii_mm: Point
    z_radius_mm: float
    angle_deg: float = 0.0

    def __post_init__(self) -> None:
        Region.__post_init__(self)
        if not isinstance(self.z_mm, int | float):
            raise RegionError("z_mm", "must be the position of the centre", self.z_mm)
        set_points(self, "center_mm")
        finite("angle_deg", self.angle_deg)
        set_points(self, "radii_mm")
        positive("radii_mm", *self.radii_mm)
        positive("z_radius_mm", self.z_radius_mm)

    @property
    def area_mm2(self) -> float:
        """Area of the section through the centre."""
        return math.pi * self.radii_mm[0] * self.radii_mm[1]

    @property
    def volume_mm3(self) -> float:
        """Volume in closed form."""
        return 4 / 3 * self.area_mm2 * self.z_radius_mm

    def section(self, z_mm: float, slab_mm: float = 0.0) -> Ellipse | None:
        """Return the ellipse in which a slab cuts it, or None if the slab misses it.

        The ellipse has the mean area of the sections within the slab, so that slabs side by side
        hold the ellipsoid's volume; a slab of no thickness gives the section itself.
        """
        assert isinstance(self.z_mm, int | float)  # noqa: S101 - checked in __post_init__
        c, at = self.z_radius_mm, z_mm - self.z_mm
        if slab_mm > 0:
            low, high = max(at - slab_mm / 2, -c), min(at + slab_mm / 2, c)
            inside = max(high - low, 0.0)
            share = (inside - (high**3 - low**3) / (3 * c * c)) / slab_mm if inside else 0.0
        else:
            share = 1 - (at / c) ** 2
            share = 1e-16 if abs(share) < 1e-12 else share  # a pole belongs to it
        if share <= 0:
            return None
        b, a = (radius * math.sqrt(share) for radius in self.radii_mm)
        return Ellipse(self.center_mm, (b, a), self.angle_deg)


@dataclass(frozen=True, slots=True)
class Box(Region):
    """A rectangle, possibly turned.

    Attributes
    ----------
    center_mm : (float, float)
        y and x of the centre.
    size_mm : (float, float)
        Height and width; at angle 0 along y and x.
    angle_deg : float
        Direction of the width.
    """

    kind: ClassVar[str] = "box"

    center_mm: Point
    size_mm: Point
    angle_deg: float = 0.0

    def __post_init__(self) -> None:
        Region.__post_init__(self)
        set_points(self, "center_mm")
        finite("angle_deg", self.angle_deg)
        set_points(self, "size_mm")
        positive("size_mm", *self.size_mm)

    @property
    def area_mm2(self) -> float:
        """Area in closed form."""
        return self.size_mm[0] * self.size_mm[1]

    @property
    def vertices_mm(self) -> tuple[Point, ...]:
        """The four corners, counter-clockwise on the screen, as (y, x)."""
        along_y, along_x = direction(self.angle_deg)
        across_y, across_x = direction(self.angle_deg + 90.0)
        h, w = self.size_mm[0] / 2, self.size_mm[1] / 2
        y, x = self.center_mm
        return tuple(
            (y + i * w * along_y + j * h * across_y, x + i * w * along_x + j * h * across_x)
            for i, j in ((-1, -1), (1, -1), (1, 1), (-1, 1))
        )


@dataclass(frozen=True, slots=True)
class Polygon(Region):
    """A simple polygon, convex or not.

    Attributes
    ----------
    vertices_mm : tuple of (float, float)
        The corners as (y, x), in either sense of rotation; closed by itself.
    """

    kind: ClassVar[str] = "polygon"

    vertices_mm: tuple[Point, ...]

    def __post_init__(self) -> None:
        Region.__post_init__(self)
        if len(self.vertices_mm) < 3:
            raise RegionError("vertices_mm", "must have at least 3 corners", len(self.vertices_mm))
        corners = tuple(as_point("vertices_mm", vertex) for vertex in self.vertices_mm)
        object.__setattr__(self, "vertices_mm", corners)
        if _crosses_itself(self.vertices_mm):
            raise RegionError(
                "vertices_mm", "must not cross itself", f"{len(self.vertices_mm)} corners that do"
            )
        if self.area_mm2 <= 0:
            raise RegionError("vertices_mm", "must enclose an area", self.area_mm2)

    @property
    def area_mm2(self) -> float:
        """Area by the shoelace formula."""
        y, x = np.asarray(self.vertices_mm, dtype=float).T
        y, x = y - y.mean(), x - x.mean()
        return float(abs(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y)) / 2)


@dataclass(frozen=True, slots=True)
class Segment(Region):
    """A straight line from A to B, with a width across which a profile is averaged.

    Attributes
    ----------
    start_mm, end_mm : (float, float)
        The ends as (y, x).
    width_mm : float
        Full width across the line; 0 for the line itself.
    """

    kind: ClassVar[str] = "segment"

    start_mm: Point
    end_mm: Point
    width_mm: float = 0.0

    def __post_init__(self) -> None:
        Region.__post_init__(self)
        set_points(self, "start_mm")
        set_points(self, "end_mm")
        finite("width_mm", self.width_mm)
        if self.width_mm < 0:
            raise RegionError("width_mm", "must not be negative", self.width_mm)
        if self.length_mm <= 0:
            raise RegionError("end_mm", "must differ from start_mm", self.end_mm)

    @property
    def length_mm(self) -> float:
        """Distance between the ends."""
        return math.dist(self.start_mm, self.end_mm)


@dataclass(frozen=True, slots=True)
class Path(Region):
    """A line of straight pieces, with a width across which a profile is averaged.

    Attributes
    ----------
    vertices_mm : tuple of (float, float)
        Its corners as (y, x), from start to end, each different from the next.
    width_mm : float
        Full width across the line; 0 for the line itself.

    Examples
    --------
    >>> path = Path(((0, 0), (0, 10), (10, 10)), width_mm=2.0)
    >>> path.length_mm, path.strip().area_mm2  # the outer corner is cut off: half of 1 by 1
    (20.0, 39.5)
    """

    kind: ClassVar[str] = "path"

    vertices_mm: tuple[Point, ...]
    width_mm: float = 0.0

    def __post_init__(self) -> None:
        Region.__post_init__(self)
        corners = tuple(as_point("vertices_mm", vertex) for vertex in self.vertices_mm)
        object.__setattr__(self, "vertices_mm", corners)
        if len(corners) < 2:
            raise RegionError("vertices_mm", "must have at least 2 corners", len(corners))
        if any(a == b for a, b in itertools.pairwise(corners)):
            raise RegionError("vertices_mm", "must each differ from the next", corners)
        finite("width_mm", self.width_mm)
        if self.width_mm < 0:
            raise RegionError("width_mm", "must not be negative", self.width_mm)

    @property
    def length_mm(self) -> float:
        """Length from start to end along its pieces."""
        return sum(math.dist(a, b) for a, b in itertools.pairwise(self.vertices_mm))

    def strip(self) -> Polygon:
        """Return what lies within half the width of the path, on the same slices.

        It ends squarely where the path does; outer corners are cut off straight.

        Raises
        ------
        RegionError
            If the path has no width, turns too sharply for it, or comes within it of itself.
        """
        if self.width_mm <= 0:
            raise RegionError("width_mm", "must be greater than 0 to enclose pixels", self.width_mm)
        pieces = pieces_of(np.asarray(self.vertices_mm, dtype=float))
        if self.width_mm > pieces.narrowest():
            raise RegionError(
                "width_mm",
                f"must be at most {pieces.narrowest():.3g} mm where the path turns so sharply",
                self.width_mm,
            )
        corners = tuple((float(y), float(x)) for y, x in pieces.strip(self.width_mm))
        if _crosses_itself(corners):
            raise RegionError(
                "vertices_mm", "must stay clear of itself by its width to enclose pixels",
                f"a width of {self.width_mm:.3g} mm",
            )  # fmt: skip
        held = {name: getattr(self, name) for name in ("z_mm", "name", "group", "code", "values")}
        return Polygon(corners, **held)


def _crosses_itself(vertices: tuple[Point, ...]) -> bool:
    """Tell whether any two edges that share no corner touch or cross."""
    points = np.asarray(vertices, dtype=float)
    n = len(points)
    ends = np.roll(points, -1, axis=0)

    def side(
        a: NDArray[np.float64], b: NDArray[np.float64], c: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        cross = (b[..., 0] - a[..., 0]) * (c[..., 1] - a[..., 1]) - (b[..., 1] - a[..., 1]) * (
            c[..., 0] - a[..., 0]
        )
        return np.sign(cross)

    for i in range(n - 2):
        stop = n - 1 if i == 0 else n  # the last edge touches the first one at a corner
        others = slice(i + 2, stop)
        c, d = points[others], ends[others]
        if len(c) == 0:
            continue
        a, b = points[i], ends[i]
        crossing = (side(a, b, c) * side(a, b, d) < 0) & (side(c, d, a) * side(c, d, b) < 0)
        if bool(crossing.any()):
            return True
    return False
