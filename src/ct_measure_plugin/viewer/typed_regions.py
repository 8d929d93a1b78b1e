"""Regions as people type them: a kind, a middle, a size; and regions read back into such fields."""

from __future__ import annotations

from dataclasses import dataclass

from ct_measure_plugin.physics.regions import Box, Disc, Ellipse, Ellipsoid, Region

__all__ = ["KINDS", "Typed", "region_of", "typed_of"]

#: What can be typed, and what people call it.
KINDS = {"disc": "Disc", "ellipse": "Ellipse", "box": "Box", "ellipsoid": "Ellipsoid"}


@dataclass(frozen=True, slots=True)
class Typed:
    """The fields.

    Attributes
    ----------
    kind : str
        One of :data:`KINDS`.
    center_mm : (float, float)
        y and x of the middle.
    size_mm : (float, float)
        Height and width over all; of a disc both are its diameter.
    angle_deg : float
        Direction of the width, counter-clockwise on the screen.
    depth_mm : float
        Length along z of an ellipsoid.
    """

    kind: str = "disc"
    center_mm: tuple[float, float] = (0.0, 0.0)
    size_mm: tuple[float, float] = (20.0, 20.0)
    angle_deg: float = 0.0
    depth_mm: float = 20.0


def region_of(typed: Typed, z_mm: float) -> Region:
    """Return the region that fields describe, on the slice at a position.

    Raises
    ------
    RegionError
        If a size is not greater than 0.

    Examples
    --------
    >>> region_of(Typed("disc", (1.0, 2.0), (10.0, 10.0)), 40.0).radius_mm
    5.0
    """
    (height, width), center, angle = typed.size_mm, typed.center_mm, typed.angle_deg
    if typed.kind == "disc":
        return Disc(center, width / 2, z_mm=z_mm)
    if typed.kind == "box":
        return Box(center, (height, width), angle, z_mm=z_mm)
    radii = height / 2, width / 2
    if typed.kind == "ellipse":
        return Ellipse(center, radii, angle, z_mm=z_mm)
    return Ellipsoid(center, radii, typed.depth_mm / 2, angle, z_mm=z_mm)


def typed_of(region: Region | None) -> Typed | None:
    """Return a region's fields, None for one that cannot be typed.

    >>> typed_of(Box((1.0, 2.0), (4.0, 6.0), 30.0)).size_mm
    (4.0, 6.0)
    """
    if isinstance(region, Disc):
        return Typed("disc", region.center_mm, (2 * region.radius_mm,) * 2)
    if isinstance(region, Box):
        return Typed("box", region.center_mm, region.size_mm, region.angle_deg)
    if isinstance(region, Ellipse | Ellipsoid):
        height, width = (2 * radius for radius in region.radii_mm)
        depth = 2 * region.z_radius_mm if isinstance(region, Ellipsoid) else 20.0
        return Typed(region.kind, region.center_mm, (height, width), region.angle_deg, depth)
    return None
