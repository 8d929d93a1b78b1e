"""Statistics of the pixels in each region."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, ClassVar, Literal, cast

import numpy as np
from pydantic import Field

from ct_measure_plugin.measurements.base import BODIES, Measurement, RegionNeed, Settings
from ct_measure_plugin.measurements.gather import Gathered, gather
from ct_measure_plugin.physics.region_glance import RegionGlance, region_glance
from ct_measure_plugin.physics.region_statistics import RegionStatistics, region_statistics
from ct_measure_plugin.physics.results import NotMeasured, Result

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["MeasureRegionStatistics", "RegionStatisticsSettings"]

#: Fewer pixels than this are refused: a spread from so few tells nothing (common practice).
TOO_FEW_PIXELS = 9


class RegionStatisticsSettings(Settings):
    """Settings of region statistics."""

    coverage: Literal["area", "center"] = Field(
        "area",
        title="Pixel weighting",
        description="area: border pixels count by the exact fraction inside; center: a pixel"
        " counts whole if its centre lies inside",
    )
    bin_width: float = Field(
        5.0,
        gt=0,
        title="Histogram bin width",
        description="width of the histogram's bins, on which mode, entropy and uniformity rest",
    )
    bin_edge: float = Field(
        -0.5,
        title="Histogram bin edge",
        description="a value at which one bin ends and the next begins",
    )
    percentiles: tuple[float, ...] = Field(
        (),
        title="Percentiles",
        description="further percentiles, 0 to 100",
    )
    ranges: tuple[tuple[float, float], ...] = Field(
        (),
        title="Ranges",
        description="ranges of values (low, high) whose share of the region is wanted",
    )
    along_z: bool = Field(
        True,
        title="Curves along z",
        description="mean and SD of every slice of a region on several slices",
    )


class MeasureRegionStatistics(Measurement):
    """Mean, SD, extremes, median and shape of the pixels in a region."""

    name: ClassVar[str] = "region_statistics"
    title: ClassVar[str] = "Region statistics"
    summary: ClassVar[str] = "Mean, SD, area and extremes of the pixels in each region."
    settings_type: ClassVar[type[Settings]] = RegionStatisticsSettings
    result_type: ClassVar[type[Result]] = RegionStatistics
    regions: ClassVar[RegionNeed] = RegionNeed(BODIES, thresholds=True)
    columns: ClassVar[tuple[str, ...]] = (
        "mean",
        "sd",
        "n",
        "area",
        "volume",
        "minimum",
        "maximum",
        "median",
    )
    lists: ClassVar[tuple[str, ...]] = ("percentiles", "shares")

    def measure(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> RegionStatistics | NotMeasured:
        """Measure one region."""
        wanted = cast("RegionStatisticsSettings", settings)
        found = self._pixels(volume, regions[0], wanted)
        if isinstance(found, NotMeasured):
            return found
        curves = wanted.along_z and len(found.slices) > 1
        result = region_statistics(
            found.values,
            found.weights,
            spacing_mm=found.spacing_mm,
            unit=volume.unit,
            bin_width=wanted.bin_width,
            bin_edge=wanted.bin_edge,
            percentiles=wanted.percentiles,
            ranges=wanted.ranges,
            positions_mm=volume.positions_mm[found.slices] if curves else None,
        )
        return replace(result, cautions=(*found.cautions, *result.cautions))

    def glance(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> RegionGlance | NotMeasured:
        """Return one region's numbers without their uncertainties."""
        found = self._pixels(volume, regions[0], cast("RegionStatisticsSettings", settings))
        if isinstance(found, NotMeasured):
            return found
        result = region_glance(
            found.values, found.weights, spacing_mm=found.spacing_mm, unit=volume.unit
        )
        return replace(result, cautions=(*found.cautions, *result.cautions))

    def _pixels(
        self, volume: Volume, region: Region, wanted: RegionStatisticsSettings
    ) -> Gathered | NotMeasured:
        found = gather(volume, region, rule=wanted.coverage)
        if isinstance(found, NotMeasured):
            return found
        count = int(np.count_nonzero(found.weights))
        if count < TOO_FEW_PIXELS:
            return NotMeasured(
                f"the region holds {count} pixel{'s' * (count != 1)};"
                f" at least {TOO_FEW_PIXELS} are needed",
                "draw it larger, or over more slices",
                found.cautions,
            )
        return found
