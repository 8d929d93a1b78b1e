"""Statistics of the pixels in each region."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any, ClassVar, Literal, cast

import numpy as np
from pydantic import Field, field_validator

from ct_measure_plugin.measurements.base import BODIES, Measurement, RegionNeed, Settings
from ct_measure_plugin.measurements.gather import gather, gather_enough
from ct_measure_plugin.measurements.noise_spectrum import NoiseSpectrum, spectrum_from
from ct_measure_plugin.physics.differences import paired_mean
from ct_measure_plugin.physics.region_glance import RegionGlance, region_glance
from ct_measure_plugin.physics.region_statistics import RegionStatistics, region_statistics
from ct_measure_plugin.physics.results import NotMeasured, Result

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.results import Quantity
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["MeasureRegionStatistics", "RegionStatisticsSettings"]


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
    noise_spectrum: NoiseSpectrum | None = Field(
        None,
        title="Noise spectrum",
        description="a record of a noise power spectrum from the same series, material and distance"
        " from the centre, saved as JSON: the standard error of the mean is then from it, and not"
        " from the region's own pixels",
        json_schema_extra={"file": "noise spectrum"},
    )

    @field_validator("noise_spectrum", mode="before")
    @classmethod
    def _read_spectrum(cls, given: Any) -> Any:
        """Take a measured spectrum, or read the file that holds it."""
        return spectrum_from(given)


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
        found = gather_enough(volume, regions[0], rule=wanted.coverage)
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
            noise=None if wanted.noise_spectrum is None else wanted.noise_spectrum.spectrum(),
        )
        return replace(result, cautions=(*found.cautions, *result.cautions))

    def glance(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> RegionGlance | NotMeasured:
        """Return one region's numbers without their uncertainties."""
        wanted = cast("RegionStatisticsSettings", settings)
        found = gather_enough(volume, regions[0], rule=wanted.coverage)
        if isinstance(found, NotMeasured):
            return found
        result = region_glance(
            found.values, found.weights, spacing_mm=found.spacing_mm, unit=volume.unit
        )
        return replace(result, cautions=(*found.cautions, *result.cautions))

    def paired(
        self, first: Volume, second: Volume, regions: Sequence[Region], settings: Settings
    ) -> dict[str, Quantity]:
        """Return the difference of the means, from the differences of the pixels."""
        rule = cast("RegionStatisticsSettings", settings).coverage
        one, other = (gather(volume, regions[0], rule=rule) for volume in (first, second))
        if isinstance(one, NotMeasured) or isinstance(other, NotMeasured):
            return {}
        alike = first.unit == second.unit and np.array_equal(one.weights, other.weights)
        if not alike or not np.isfinite(one.values - other.values)[one.weights > 0].all():
            return {}  # pixels were left out of one of them: the means are not of the same ones
        mean = paired_mean(
            one.values, other.values, one.weights, spacing_mm=one.spacing_mm, unit=first.unit
        )
        return {"mean": mean}
