"""The MTF across the round edge of the rod or cylinder in each box."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING, ClassVar, Literal, cast

from pydantic import Field

from ct_measure_plugin.measurements.base import Measurement, RegionNeed, Settings, further_levels
from ct_measure_plugin.measurements.boxes import cut_box
from ct_measure_plugin.measurements.isocentre import isocentre
from ct_measure_plugin.physics.disc_mtf import DiscMtf, disc_mtf
from ct_measure_plugin.physics.regions import Box, Disc
from ct_measure_plugin.physics.results import NotMeasured, Result

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["DiscMtfSettings", "MeasureDiscMtf"]

#: Fewest pixels a side that hold a rod and its surroundings.
LEAST_PIXELS = 16


class DiscMtfSettings(Settings):
    """Settings of the disc MTF."""

    method: Literal["fitted", "conventional"] = Field(
        "fitted",
        description="fitted: the edge spread function is composed of flexible shapes, as smooth as"
        " the noise asks; conventional: bin, differentiate, window, transform",
    )
    direction: Literal["all", "radial", "azimuthal", "angle"] = Field(
        "all",
        description="which part of the edge is used: all around; where it faces the isocentre or"
        " away from it (radial resolution); at right angles to that (azimuthal); or about an angle",
    )
    angle_deg: float = Field(
        0.0,
        title="Angle (°)",
        description="for direction 'angle': of the edge's normal, counter-clockwise from +x",
    )
    half_width_deg: float = Field(
        22.5,
        gt=0,
        le=90,
        title="Half-width (°)",
        description="half-width of the sectors about the direction, on either side of the rod",
    )
    isocentre_mm: tuple[float, float] | None = Field(
        None,
        title="Isocentre y, x (mm)",
        description="where the isocentre lies in the image frame; from the header or the middle of"
        " the image if not set",
    )
    levels: tuple[float, ...] = further_levels()


class MeasureDiscMtf(Measurement):
    """MTF, edge and line spread function across the edge of a rod or cylinder."""

    name: ClassVar[str] = "disc_mtf"
    title: ClassVar[str] = "MTF of a round edge"
    summary: ClassVar[str] = "Resolution across the edge of a rod or cylinder, at its own contrast."
    settings_type: ClassVar[type[Settings]] = DiscMtfSettings
    result_type: ClassVar[type[Result]] = DiscMtf
    regions: ClassVar[RegionNeed] = RegionNeed(("disc", "box"))
    columns: ClassVar[tuple[str, ...]] = ("f50", "f10", "radius", "contrast", "contrast_to_noise")

    def measure(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> DiscMtf | NotMeasured:
        """Measure the rod in one box or disc; the region's slices are pooled."""
        wanted = cast("DiscMtfSettings", settings)
        region = cast("Disc | Box", regions[0])
        box = cut_box(volume, region, least=LEAST_PIXELS)
        if isinstance(box, NotMeasured):
            return box
        sector = _sector(volume, region, box.slices[0], wanted)
        if isinstance(sector, NotMeasured):
            return replace(sector, cautions=box.cautions)
        found = box.told(
            disc_mtf(
                box.values,
                spacing_mm=volume.spacing_mm[1:],
                method=wanted.method,
                sector_deg=sector,
                slice_gap_mm=volume.spacing_mm[0] if volume.evenly_spaced else None,
                unit=volume.unit,
                limits=volume.representable_hu,
                levels=wanted.levels,
            )
        )
        if isinstance(found, NotMeasured):
            return found
        return replace(found, center_mm=box.shifted(found.center_mm))

    def marks(
        self,
        volume: Volume,  # noqa: ARG002
        regions: Sequence[Region],
        settings: Settings,  # noqa: ARG002
        answer: Result | NotMeasured,
    ) -> tuple[Region, ...]:
        """Return the circle that was found."""
        if not isinstance(answer, DiscMtf):
            return ()
        radius = answer.radius.value
        return (Disc(answer.center_mm, radius, z_mm=regions[0].z_mm, name=regions[0].name),)


def _sector(
    volume: Volume, region: Disc | Box, k: int, wanted: DiscMtfSettings
) -> tuple[float, float] | NotMeasured | None:
    if wanted.direction == "all":
        return None
    if wanted.direction == "angle":
        return wanted.angle_deg, wanted.half_width_deg
    cy, cx = isocentre(volume, wanted.isocentre_mm, k)
    dy, dx = region.center_mm[0] - cy, region.center_mm[1] - cx
    if math.hypot(dy, dx) < 1.0:
        return NotMeasured(
            "the rod lies at the isocentre, where no direction is radial",
            "measure a rod away from it, or choose a direction by its angle",
        )
    outwards = math.degrees(math.atan2(-dy, dx))
    return outwards + (90.0 if wanted.direction == "azimuthal" else 0.0), wanted.half_width_deg
