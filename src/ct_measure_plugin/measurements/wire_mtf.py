"""The MTF from the wire or bead in each box."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, ClassVar, Literal, cast

from pydantic import Field

from ct_measure_plugin.measurements.base import Measurement, RegionNeed, Settings, further_levels
from ct_measure_plugin.measurements.boxes import cut_box
from ct_measure_plugin.physics.regions import Disc, Segment
from ct_measure_plugin.physics.results import NotMeasured, Quantity, Result
from ct_measure_plugin.physics.wire_mtf import WireMtf, wire_mtf

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["MeasureWireMtf", "WireMtfSettings"]

#: Fewest pixels a side that hold a spot and its surroundings.
LEAST_PIXELS = 12


class WireMtfSettings(Settings):
    """Settings of the wire MTF."""

    object_diameter_mm: float | None = Field(
        None,
        ge=0,
        title="Diameter (mm)",
        description="diameter of the wire or bead, whose own transfer function is divided out",
    )
    shape: Literal["wire", "bead"] = Field(
        "wire", description="a wire that crosses the slices, or a bead within one"
    )
    method: Literal["fitted", "transform", "rings"] = Field(
        "fitted",
        description="fitted: a spot composed of flexible shapes, as smooth as the noise asks;"
        " transform: the two-dimensional transform; rings: the oversampled radial profile",
    )
    direction_deg: float | None = Field(
        None,
        title="Direction (°)",
        description="direction of the MTF for the method 'transform', counter-clockwise from +x;"
        " the mean over all directions if not set",
    )
    levels: tuple[float, ...] = further_levels()


class MeasureWireMtf(Measurement):
    """MTF and point spread from a thin wire, leaning or not, or from a bead."""

    name: ClassVar[str] = "wire_mtf"
    title: ClassVar[str] = "MTF of a wire or bead"
    summary: ClassVar[str] = "Resolution within the slice from a thin wire or a bead."
    settings_type: ClassVar[type[Settings]] = WireMtfSettings
    result_type: ClassVar[type[Result]] = WireMtf
    regions: ClassVar[RegionNeed] = RegionNeed(("disc", "box"))
    columns: ClassVar[tuple[str, ...]] = ("f50", "f10", "width", "height", "contrast_to_noise")

    def measure(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> WireMtf | NotMeasured:
        """Measure the wire in one region, through all its slices."""
        wanted = cast("WireMtfSettings", settings)
        box = cut_box(volume, regions[0], least=LEAST_PIXELS)
        if isinstance(box, NotMeasured):
            return box
        found = box.told(
            wire_mtf(
                box.values,
                spacing_mm=volume.spacing_mm[1:],
                object_diameter_mm=wanted.object_diameter_mm,
                shape=wanted.shape,
                method=wanted.method,
                direction_deg=wanted.direction_deg if wanted.method == "transform" else None,
                slice_gap_mm=volume.spacing_mm[0] if volume.evenly_spaced else None,
                slice_thickness_mm=_thickness(volume, box.slices[0]),
                unit=volume.unit,
                limits=volume.representable_hu,
                levels=wanted.levels,
            )
        )
        if isinstance(found, NotMeasured):
            return found
        first, last = map(box.shifted, found.ends_mm)
        return replace(found, center_mm=box.shifted(found.center_mm), ends_mm=(first, last))

    def marks(
        self,
        volume: Volume,
        regions: Sequence[Region],
        settings: Settings,  # noqa: ARG002
        answer: Result | NotMeasured,
    ) -> tuple[Region, ...]:
        """Return the spot at half its height, and the way that a leaning wire takes."""
        if not isinstance(answer, WireMtf):
            return ()
        z, name = regions[0].z_mm, regions[0].name
        pixel = max(volume.spacing_mm[1:])
        half = answer.width.value / 2 if isinstance(answer.width, Quantity) else pixel
        spot = Disc(answer.center_mm, half, z_mm=z, name=name)
        first, last = answer.ends_mm
        if first == last:
            return (spot,)
        return spot, Segment(first, last, z_mm=z, name=name)


def _thickness(volume: Volume, k: int) -> float | None:
    """Return the slice thickness that the header tells."""
    return volume.acquisition[k].slice_thickness_mm if k < len(volume.acquisition) else None
