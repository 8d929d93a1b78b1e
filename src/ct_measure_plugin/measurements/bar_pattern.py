"""The modulation of bar groups, each in its box, with boxes of their two materials."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, ClassVar, cast

from pydantic import Field

from ct_measure_plugin.measurements.base import Measurement, RegionNeed, Settings
from ct_measure_plugin.measurements.boxes import Boxed, cut_box
from ct_measure_plugin.physics.bar_pattern import LEAST_PIXELS, BarPattern, bar_pattern
from ct_measure_plugin.physics.results import NotMeasured, Result

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["BarPatternSettings", "MeasureBarPattern"]


class BarPatternSettings(Settings):
    """Settings of the bar pattern."""

    frequencies: tuple[float, ...] = Field(
        (),
        title="Bar pairs a mm",
        description="of each group, in the order of their boxes; the last two boxes are the bars'"
        " material and what lies between them",
    )


class MeasureBarPattern(Measurement):
    """MTF at the frequencies of bar groups, from the SD over them."""

    name: ClassVar[str] = "bar_pattern"
    title: ClassVar[str] = "Bar pattern"
    summary: ClassVar[str] = "Modulation of bar groups from the standard deviation over them."
    settings_type: ClassVar[type[Settings]] = BarPatternSettings
    result_type: ClassVar[type[Result]] = BarPattern
    regions: ClassVar[RegionNeed] = RegionNeed(("box", "disc"), at_least=3, together=True)
    columns: ClassVar[tuple[str, ...]] = ("f50", "f10", "highest", "contrast", "noise")

    def measure(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> BarPattern | NotMeasured:
        """Measure all boxes as one set; each box's slices are averaged."""
        wanted = cast("BarPatternSettings", settings)
        if len(wanted.frequencies) != len(regions) - 2:
            return NotMeasured(
                f"{len(wanted.frequencies)} frequencies were entered for"
                f" {max(len(regions) - 2, 0)} groups; the last two boxes are bar and background",
                "enter the bar pairs a mm of every group, in the order of their boxes",
            )
        boxes: list[Boxed] = []
        for region in regions:
            box = cut_box(volume, region, least=LEAST_PIXELS)
            if isinstance(box, NotMeasured):
                return box
            boxes.append(box)
        planes = [box.values.mean(axis=0) for box in boxes]
        found = bar_pattern(
            planes[:-2],
            wanted.frequencies,
            planes[-2],
            planes[-1],
            spacing_mm=volume.spacing_mm[1:],
            unit=volume.unit,
        )
        cautions = {c: None for box in boxes for c in box.cautions}
        return replace(found, cautions=(*cautions, *found.cautions))
