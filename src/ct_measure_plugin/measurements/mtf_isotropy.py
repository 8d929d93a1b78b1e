"""Resolution by direction and distance from the isocentre, from several edges, rods or wires."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, ClassVar, Literal, cast

from pydantic import Field

from ct_measure_plugin.measurements.base import Measurement, RegionNeed, Settings
from ct_measure_plugin.measurements.disc_mtf import DiscMtfSettings, MeasureDiscMtf
from ct_measure_plugin.measurements.edge_mtf import EdgeMtfSettings, MeasureEdgeMtf
from ct_measure_plugin.measurements.isocentre import isocentre
from ct_measure_plugin.measurements.wire_mtf import MeasureWireMtf, WireMtfSettings
from ct_measure_plugin.physics.coverage import slices_of
from ct_measure_plugin.physics.disc_mtf import DiscMtf
from ct_measure_plugin.physics.edge_mtf import EdgeMtf
from ct_measure_plugin.physics.mtf_isotropy import IsotropyPlace, MtfIsotropy, mtf_isotropy
from ct_measure_plugin.physics.regions import Segment, direction
from ct_measure_plugin.physics.results import Caution, NotMeasured, Quantity, Result
from ct_measure_plugin.physics.wire_mtf import WireMtf

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.regions import Box, Disc, Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["MeasureMtfIsotropy", "MtfIsotropySettings"]

#: Relative uncertainty that no f50 falls below: of an image without noise it would be 0.
LEAST_DOUBT = 1e-5

#: Directions of a wire's spot that hardly share pixels, degrees; nearer ones are alike.
WIRE_DIRECTIONS = (0.0, 45.0, 90.0, 135.0)

#: Half the length in pixels of the strokes that show where and along what f50 was measured.
STROKE_PX = 4.0


class MtfIsotropySettings(Settings):
    """Settings of the isotropy."""

    boxes: Literal["edge", "rod", "wire"] = Field(
        "edge",
        description="what each box holds: a straight edge, a rod, or a wire or bead; discs always"
        " hold rods",
    )
    sectors: int = Field(
        4,
        ge=1,
        le=8,
        description="into how many directions the edge of each rod is divided; the first one is"
        " radial",
    )
    method: Literal["fitted", "conventional"] = Field(
        "fitted", description="as for the MTF of a straight or round edge"
    )
    object_diameter_mm: float | None = Field(
        None, ge=0, title="Diameter (mm)", description="diameter of wires or beads"
    )
    shape: Literal["wire", "bead"] = Field(
        "wire", description="a wire that crosses the slices, or a bead within one"
    )
    isocentre_mm: tuple[float, float] | None = Field(
        None,
        title="Isocentre y, x (mm)",
        description="where the isocentre lies in the image frame; from the header or the middle of"
        " the image if not set",
    )


@dataclass(frozen=True, slots=True)
class _Asked:
    """One region and what is known about it."""

    volume: Volume
    region: Disc | Box
    name: str
    isocentre_mm: tuple[float, float]
    settings: MtfIsotropySettings

    def place(
        self,
        at: tuple[float, float],
        doubt: float,
        along: Quantity,
        f50: Quantity,
        half_width: float = 0.0,
    ) -> IsotropyPlace:
        """Return f50 in a direction at a place."""
        least = LEAST_DOUBT * f50.value
        return IsotropyPlace.at(
            at,
            along,
            Quantity(f50.value, f50.unit, max(f50.uncertainty or 0.0, least)),
            isocentre_mm=self.isocentre_mm,
            doubt_mm=doubt,
            half_width_deg=half_width,
            name=self.name,
        )


class MeasureMtfIsotropy(Measurement):
    """f50 of several regions together, by direction and by distance from the isocentre."""

    name: ClassVar[str] = "mtf_isotropy"
    title: ClassVar[str] = "Isotropy of the MTF"
    summary: ClassVar[str] = "Resolution by direction and by distance from the isocentre."
    settings_type: ClassVar[type[Settings]] = MtfIsotropySettings
    result_type: ClassVar[type[Result]] = MtfIsotropy
    regions: ClassVar[RegionNeed] = RegionNeed(("box", "disc"), together=True)
    columns: ClassVar[tuple[str, ...]] = (
        *("f50", "isotropy", "sharpest_direction"),
        *("far_radial", "far_azimuthal", "scatter_ratio"),
    )

    def measure(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> MtfIsotropy | NotMeasured:
        """Measure every region, and combine them."""
        wanted = cast("MtfIsotropySettings", settings)
        places: list[IsotropyPlace] = []
        cautions = list(volume.cautions)
        for number, region in enumerate(regions, start=1):
            slices = slices_of(region, volume)
            center = isocentre(volume, wanted.isocentre_mm, slices[0] if slices else 0)
            name = region.name or f"region {number}"
            found = _places(_Asked(volume, cast("Disc | Box", region), name, center, wanted))
            if isinstance(found, NotMeasured):
                cautions.append(_left_out(name, found))
            else:
                places += found[0]
                cautions += _told(found[1], cautions, name)
        answer = mtf_isotropy(places, cautions=cautions)
        if isinstance(answer, NotMeasured):
            return NotMeasured(answer.reason, answer.remedy, tuple(cautions))
        return answer

    def marks(
        self,
        volume: Volume,
        regions: Sequence[Region],
        settings: Settings,  # noqa: ARG002 - the places say all
        answer: Result | NotMeasured,
    ) -> tuple[Region, ...]:
        """Return a stroke at each place along the direction of its f50."""
        if not isinstance(answer, MtfIsotropy):
            return ()
        half = STROKE_PX * max(volume.spacing_mm[1:])
        z = regions[0].z_mm
        strokes = []
        for one in answer.places:
            down, right = (half * part for part in direction(one.direction.value))
            y, x = one.y.value, one.x.value
            ends = (y - down, x - right), (y + down, x + right)
            strokes.append(Segment(*ends, z_mm=z, name=one.name))
        return tuple(strokes)


def _places(asked: _Asked) -> tuple[list[IsotropyPlace], tuple[Caution, ...]] | NotMeasured:
    """Return what one region tells, and its cautions."""
    kind = "rod" if asked.region.kind == "disc" else asked.settings.boxes
    if kind == "edge":
        return _of_edge(asked)
    return _of_rod(asked) if kind == "rod" else _of_wire(asked)


def _of_edge(asked: _Asked) -> tuple[list[IsotropyPlace], tuple[Caution, ...]] | NotMeasured:
    settings = EdgeMtfSettings.model_validate({"method": asked.settings.method})
    found = MeasureEdgeMtf().measure(asked.volume, (asked.region,), settings)
    if not isinstance(found, EdgeMtf):
        return found
    if not isinstance(found.f50, Quantity):
        return found.f50
    (y0, x0), (y1, x1) = found.ends_mm
    middle = (y0 + y1) / 2, (x0 + x1) / 2
    doubt = found.position.uncertainty or 0.0
    return [asked.place(middle, doubt, found.normal_direction, found.f50)], found.cautions


def _of_rod(asked: _Asked) -> tuple[list[IsotropyPlace], tuple[Caution, ...]] | NotMeasured:
    """Measure the sectors of a rod's edge; the first faces the isocentre."""
    count = asked.settings.sectors
    half = 90.0 / count
    down, right = (c - o for c, o in zip(asked.region.center_mm, asked.isocentre_mm, strict=True))
    outwards = math.degrees(math.atan2(-down, right)) if math.hypot(down, right) > 1.0 else 0.0
    places: list[IsotropyPlace] = []
    cautions: list[Caution] = []
    why: NotMeasured | None = None
    for k in range(count):
        angle = (outwards + k * 180.0 / count) % 180.0
        settings = DiscMtfSettings.model_validate(
            {
                "method": asked.settings.method,
                "direction": "angle",
                "angle_deg": angle,
                "half_width_deg": half,
            }
        )
        found = MeasureDiscMtf().measure(asked.volume, (asked.region,), settings)
        f50 = found.f50 if isinstance(found, DiscMtf) else found
        if not isinstance(found, DiscMtf) or not isinstance(f50, Quantity):
            why = cast("NotMeasured", f50)
            cautions.append(_left_out(f"{angle:.0f}°", why))
            continue
        doubt = math.hypot(*found.center_doubt_mm)
        along = Quantity(angle, "°", 0.0)
        places.append(asked.place(found.center_mm, doubt, along, f50, half))
        cautions += found.cautions
    return why if why is not None and not places else (places, tuple(cautions))


def _of_wire(asked: _Asked) -> tuple[list[IsotropyPlace], tuple[Caution, ...]] | NotMeasured:
    settings = WireMtfSettings.model_validate(
        {
            "object_diameter_mm": asked.settings.object_diameter_mm,
            "shape": asked.settings.shape,
        }
    )
    found = MeasureWireMtf().measure(asked.volume, (asked.region,), settings)
    if not isinstance(found, WireMtf):
        return found
    doubt = found.center_doubt_mm
    places = [
        asked.place(found.center_mm, doubt, Quantity(angle, "°", 0.0), f50)
        for angle, f50 in found.directions.samples()
        if angle in WIRE_DIRECTIONS
    ]
    if places:
        return places, found.cautions
    return NotMeasured("f50 is not reached in any direction", "reconstruct with smaller pixels")


def _told(new: Sequence[Caution], known: Sequence[Caution], name: str) -> list[Caution]:
    """Return cautions of codes that are not known yet, with the name of where they come from."""
    codes = {caution.code for caution in known}
    found = []
    for caution in new:
        if caution.code not in codes or caution.code == "place-left-out":
            codes.add(caution.code)
            found.append(Caution(caution.code, f"{name}: {caution.text}", caution.remedy))
    return found


def _left_out(name: str, why: NotMeasured) -> Caution:
    remedy = f"{why.remedy[:1].upper()}{why.remedy[1:]}."
    return Caution("place-left-out", f"{name} was left out: {why.reason}.", remedy)
