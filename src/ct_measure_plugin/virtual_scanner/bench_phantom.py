"""The phantom of the sample volumes: a water cylinder with five sections along z.

Phantom, lab and layout are invented for this project; there is no such object.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from ct_measure_plugin.physics.attenuation import Material, material
from ct_measure_plugin.physics.regions import direction
from ct_measure_plugin.virtual_scanner.phantom import WATER, Part, Phantom
from ct_measure_plugin.virtual_scanner.solids import (
    Bead,
    block,
    disc_rod,
    ramp_strip,
    tilted_wire,
)

if TYPE_CHECKING:
    from collections.abc import Iterator

__all__ = [
    "BEADS_MM",
    "BEAD_DIAMETER_MM",
    "CYLINDER_MM",
    "RAMP_DEG",
    "RAMP_THICKNESS_MM",
    "SECTIONS",
    "WIRE_DIAMETER_MM",
    "WIRE_TILT_DEG",
    "Insert",
    "bench_phantom",
    "edge_blocks",
    "faint_discs",
    "fine_parts",
    "material_rods",
    "slice_centres",
]

#: Radius of the water cylinder.
CYLINDER_MM = 58.0

#: Section -> its z range in mm.
SECTIONS = {
    "uniform": (0.0, 20.0),
    "edges": (20.0, 27.5),
    "rods": (27.5, 35.0),
    "faint": (35.0, 42.5),
    "fine": (42.5, 57.5),
}

WIRE_DIAMETER_MM = 0.2
WIRE_TILT_DEG = 3.0
BEAD_DIAMETER_MM = 0.5
#: z, y, x of the beads.
BEADS_MM = ((50.0, 22.0, -26.0), (48.4, 44.0, -8.0), (51.7, 8.0, -38.0))
RAMP_DEG = 25.0
RAMP_THICKNESS_MM = 0.3


@dataclass(frozen=True, slots=True)
class Insert:
    """A piece of the phantom as tables name it.

    Attributes
    ----------
    material : Material
        What it is made of.
    centre_mm : (float, float)
        y, x.
    size_mm : float
        Diameter of a round piece, side of a block.
    lean_deg : float
        Angle of a block's edges to the pixel grid, counter-clockwise.
    """

    material: Material
    centre_mm: tuple[float, float]
    size_mm: float
    lean_deg: float = 0.0


def slice_centres(section: str, step_mm: float = 2.5, margin_mm: float = 0.0) -> tuple[float, ...]:
    """Return the centres of abutting slices of a section.

    >>> slice_centres("rods")
    (28.75, 31.25, 33.75)
    """
    low, high = SECTIONS[section]
    low, high = low + margin_mm, high - margin_mm
    count = round((high - low) / step_mm)
    return tuple(low + (index + 0.5) * step_mm for index in range(count))


def edge_blocks() -> tuple[Insert, ...]:
    """Return the blocks with slanted edges."""
    return (
        Insert(material("POM"), (-22.0, -20.0), 26.0, 4.0),
        Insert(material("PMMA"), (-18.0, 26.0), 24.0, -6.0),
        Insert(material("LDPE"), (26.0, -14.0), 22.0, 7.0),
        Insert(material("PTFE"), (24.0, 24.0), 20.0, 3.0),
    )


def material_rods() -> tuple[Insert, ...]:
    """Return the rods: along a spiral, each a golden angle (137.5°) after the last."""
    names = ("PTFE", "LDPE", "POM", "air", "PMMA", "polystyrene", "polycarbonate", "nylon-6")
    rods = []
    for index, name in enumerate(names):
        uy, ux = direction(20.0 + 137.508 * index)
        radius = 14.0 * math.sqrt(1.0 + 1.35 * index)
        rods.append(Insert(material(name), (round(radius * uy, 1), round(radius * ux, 1)), 11.0))
    return tuple(rods)


def faint_discs() -> tuple[Insert, ...]:
    """Return the low-contrast discs: water of a density that makes them 5, 10 or 20 HU."""
    plan = (
        (20.0, 4.0, (-40.0, -8.0)),
        (20.0, 8.0, (-30.0, 12.0)),
        (10.0, 6.0, (-12.0, 22.0)),
        (10.0, 12.0, (8.0, 8.0)),
        (5.0, 10.0, (14.0, -16.0)),
        (5.0, 16.0, (32.0, -24.0)),
    )
    return tuple(
        Insert(Material(f"water +{hu:g} HU", "H2O", 1.0 + hu / 1000.0), centre, size)
        for hu, size, centre in plan
    )


def fine_parts() -> Iterator[Part]:
    """Yield the wire, the beads and the two ramps."""
    extent = SECTIONS["fine"]
    copper, aluminium = material("copper"), material("aluminium")
    wire = tilted_wire(
        (50.0, -20.0, 18.0), WIRE_DIAMETER_MM, tilt_deg=WIRE_TILT_DEG, towards_deg=40.0, z_mm=extent
    )
    yield Part(wire, copper, WATER, "wire")
    for place in BEADS_MM:
        yield Part(Bead(place, 0.5 * BEAD_DIAMETER_MM), copper, WATER, "bead")
    for place, towards in (((50.0, 8.0, 10.0), 0.0), ((50.0, 32.0, 14.0), 180.0)):
        strip = ramp_strip(
            place,
            thickness_mm=RAMP_THICKNESS_MM,
            width_mm=10.0,
            angle_deg=RAMP_DEG,
            towards_deg=towards,
            z_mm=extent,
        )
        yield Part(strip, aluminium, WATER, "ramp")


def bench_phantom() -> Phantom:
    """Return the phantom.

    >>> phantom = bench_phantom()
    >>> phantom.material_at(30.0, *material_rods()[0].centre_mm).name
    'PTFE'
    """
    parts = [Part(disc_rod((0.0, 0.0), CYLINDER_MM, (-20.0, 80.0)), WATER, name="cylinder")]
    for insert in edge_blocks():
        solid = block(
            insert.centre_mm,
            (insert.size_mm, insert.size_mm),
            angle_deg=insert.lean_deg,
            z_mm=SECTIONS["edges"],
        )
        parts.append(Part(solid, insert.material, WATER, insert.material.name))
    for section, inserts in (("rods", material_rods()), ("faint", faint_discs())):
        for insert in inserts:
            solid = disc_rod(insert.centre_mm, 0.5 * insert.size_mm, SECTIONS[section])
            parts.append(Part(solid, insert.material, WATER, insert.material.name))
    parts.extend(fine_parts())
    return Phantom(tuple(parts), "Spindle stack (invented)")
