"""Uniformity of a water cylinder, found by itself or placed by hand."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, ClassVar, Literal, cast

import numpy as np
from pydantic import Field

from ct_measure_plugin.errors import ArgumentError, RegionError
from ct_measure_plugin.measurements.base import AREAS, Measurement, RegionNeed, Settings
from ct_measure_plugin.measurements.isocentre import isocentre
from ct_measure_plugin.physics.coverage import slices_of
from ct_measure_plugin.physics.regions import Disc
from ct_measure_plugin.physics.results import NotMeasured, Result
from ct_measure_plugin.physics.uniformity import Uniformity, uniformity
from ct_measure_plugin.physics.uniformity_samples import Places

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["MeasureUniformity", "UniformitySettings"]


class UniformitySettings(Settings):
    """Settings of uniformity; lengths are in units of the cylinder's radius."""

    placement: Literal["found", "as drawn"] = Field(
        "found",
        description="found: the cylinder is looked for, in the slices of the region or in all; as"
        " drawn: one disc, drawn by hand, is its cross-section",
    )
    edge_regions: int = Field(4, ge=2, le=24, description="how many edge regions, evenly spread")
    edge_position: float = Field(
        0.8,
        ge=0.1,
        le=0.95,
        description="distance of the edge regions' centres from the axis, in cylinder radii; 0.8"
        " leaves 10 mm to the edge of a phantom of 200 mm",
    )
    edge_size: float = Field(
        0.1, ge=0.02, le=0.25, description="radius of an edge region, in cylinder radii"
    )
    centre_size: float = Field(
        0.1, ge=0.02, le=0.25, description="radius of the centre region, in cylinder radii"
    )
    first_deg: float = Field(
        0.0,
        ge=-360.0,
        le=360.0,
        title="First azimuth (°)",
        description="azimuth of the first edge region, counter-clockwise on the screen from +x",
    )
    field: float = Field(
        0.9,
        ge=0.5,
        le=0.98,
        description="how far radial profile, cup and map reach, in cylinder radii; smaller for a"
        " thick wall",
    )

    def places(self) -> Places:
        """Return where to look."""
        return Places(
            edge_regions=self.edge_regions,
            edge_position=self.edge_position,
            edge_size=self.edge_size,
            first_deg=self.first_deg,
            centre_size=self.centre_size,
            field=self.field,
        )


class MeasureUniformity(Measurement):
    """Centre and edge of a cylinder of one material, cup, shading."""

    name: ClassVar[str] = "uniformity"
    title: ClassVar[str] = "Uniformity"
    summary: ClassVar[str] = "Whether a water cylinder reads the same everywhere."
    settings_type: ClassVar[type[Settings]] = UniformitySettings
    result_type: ClassVar[type[Result]] = Uniformity
    regions: ClassVar[RegionNeed] = RegionNeed(AREAS, at_least=0, together=True)
    columns: ClassVar[tuple[str, ...]] = (
        "water",
        "sd",
        "deviation",
        "cupping",
        "cup_depth",
        "shading",
    )

    def measure(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> Uniformity | NotMeasured:
        """Measure the cylinder on the slices of the region, or on all."""
        wanted = cast("UniformitySettings", settings)
        slices, circle = _where(volume, regions, wanted)
        if not len(slices):
            return NotMeasured(
                "the region lies on no slice", "draw it within the volume", volume.cautions
            )
        whole = len(slices) == volume.shape[0]
        _, dy, dx = volume.spacing_mm
        _, y, x = volume.origin_mm
        center = isocentre(volume, None, int(slices[0]))
        found = uniformity(
            volume.hu if whole else np.stack([volume.plane(int(k)) for k in slices]),
            spacing_mm=(dy, dx),
            z_mm=volume.positions_mm[slices].tolist(),
            circle_mm=circle,
            places=wanted.places(),
            rotation_mm=(center[0] - y, center[1] - x),
            unit=volume.unit,
        )
        if isinstance(found, NotMeasured):
            return replace(found, cautions=volume.cautions)
        picture = found.deviation_map
        return replace(
            found,
            center_y=replace(found.center_y, y=found.center_y.y + y),
            center_x=replace(found.center_x, y=found.center_x.y + x),
            deviation_map=replace(picture, origin=(picture.origin[0] + y, picture.origin[1] + x)),
            cautions=(*volume.cautions, *found.cautions),
        )

    def marks(
        self,
        volume: Volume,  # noqa: ARG002 - the answer knows its slices
        regions: Sequence[Region],  # noqa: ARG002
        settings: Settings,
        answer: Result | NotMeasured,
    ) -> tuple[Region, ...]:
        """Return the cylinder's circle, the centre region and the edge regions in every slice."""
        if not isinstance(answer, Uniformity):
            return ()
        places, radius = cast("UniformitySettings", settings).places(), answer.radius.value
        wanted = [((0.0, 0.0), 1.0), ((0.0, 0.0), places.centre_size)]
        for y, x in places.ring()[places.chosen()].tolist():
            wanted.append(((y, x), places.edge_size))
        return tuple(
            Disc((cy + y * radius, cx + x * radius), size * radius, z_mm=z)
            for z, cy, cx in zip(
                answer.center_y.x.tolist(),
                answer.center_y.y.tolist(),
                answer.center_x.y.tolist(),
                strict=True,
            )
            for (y, x), size in wanted
        )


def _where(
    volume: Volume, regions: Sequence[Region], settings: UniformitySettings
) -> tuple[NDArray[np.intp], tuple[float, float, float] | None]:
    """Return the slices, and y, x and radius of a cylinder drawn by hand."""
    if len(regions) > 1:
        raise RegionError("regions", "must hold at most 1 for uniformity", len(regions))
    if not regions:
        if settings.placement == "as drawn":
            raise ArgumentError("placement", "must be 'found' without a disc", settings.placement)
        return np.arange(volume.shape[0], dtype=np.intp), None
    slices = np.asarray(slices_of(regions[0], volume), dtype=np.intp)
    if settings.placement == "found":
        return slices, None
    drawn = regions[0]
    if not isinstance(drawn, Disc):
        raise ArgumentError("placement", "must be 'found' unless a disc is drawn", drawn.kind)
    _, y, x = volume.origin_mm
    return slices, (drawn.center_mm[0] - y, drawn.center_mm[1] - x, drawn.radius_mm)
