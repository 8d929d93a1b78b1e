"""The MTF across the straight edge in each box."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, ClassVar, Literal, cast

from pydantic import Field

from ct_measure_plugin.measurements.base import Measurement, RegionNeed, Settings, further_levels
from ct_measure_plugin.measurements.boxes import cut_box
from ct_measure_plugin.physics.edge_mtf import EdgeMtf, edge_mtf
from ct_measure_plugin.physics.regions import Segment
from ct_measure_plugin.physics.results import NotMeasured, Result

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["EdgeMtfSettings", "MeasureEdgeMtf"]

#: Fewest pixels a side that hold an edge and two plateaus.
LEAST_PIXELS = 16


class EdgeMtfSettings(Settings):
    """Settings of the edge MTF."""

    method: Literal["fitted", "conventional"] = Field(
        "fitted",
        description="fitted: the edge spread function is composed of flexible shapes, as smooth as"
        " the noise asks; conventional: bin, differentiate, window, transform",
    )
    levels: tuple[float, ...] = further_levels()


class MeasureEdgeMtf(Measurement):
    """MTF, edge and line spread function across a straight, slanted edge."""

    name: ClassVar[str] = "edge_mtf"
    title: ClassVar[str] = "MTF of a straight edge"
    summary: ClassVar[str] = "Resolution across a straight, slightly slanted edge in a box."
    settings_type: ClassVar[type[Settings]] = EdgeMtfSettings
    result_type: ClassVar[type[Result]] = EdgeMtf
    regions: ClassVar[RegionNeed] = RegionNeed(("box",))
    columns: ClassVar[tuple[str, ...]] = ("f50", "f10", "angle", "width", "contrast_to_noise")

    def measure(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> EdgeMtf | NotMeasured:
        """Measure the edge in one box; the box's slices are averaged."""
        wanted = cast("EdgeMtfSettings", settings)
        box = cut_box(volume, regions[0], least=LEAST_PIXELS)
        if isinstance(box, NotMeasured):
            return box
        found = box.told(
            edge_mtf(
                box.values,
                spacing_mm=volume.spacing_mm[1:],
                method=wanted.method,
                unit=volume.unit,
                limits=volume.representable_hu,
                levels=wanted.levels,
            )
        )
        if isinstance(found, NotMeasured):
            return found
        first, last = map(box.shifted, found.ends_mm)
        return replace(found, ends_mm=(first, last))

    def marks(
        self,
        volume: Volume,  # noqa: ARG002 - the found edge says all
        regions: Sequence[Region],
        settings: Settings,  # noqa: ARG002
        answer: Result | NotMeasured,
    ) -> tuple[Region, ...]:
        """Return the edge that was found, as a segment over the box's slices."""
        if not isinstance(answer, EdgeMtf):
            return ()
        return (Segment(*answer.ends_mm, z_mm=regions[0].z_mm, name=regions[0].name),)
