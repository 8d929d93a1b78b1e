"""An object beside its background: difference, contrast, CNR and SNR."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, ClassVar, Literal, cast

from pydantic import Field

from ct_measure_plugin.measurements.base import BODIES, Measurement, RegionNeed, Settings
from ct_measure_plugin.measurements.gather import Gathered, gather_enough, shared
from ct_measure_plugin.physics.region_contrast import RegionContrast, region_contrast
from ct_measure_plugin.physics.region_statistics import RegionStatistics, region_statistics
from ct_measure_plugin.physics.results import Caution, NotMeasured, Result

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["MeasureRegionContrast", "RegionContrastSettings"]

#: Share of the smaller region's pixels from which two regions are said to overlap.
OVERLAP = 0.01

#: Ratio of sizes from which they are unlike (rule of thumb).
UNLIKE = 2.0

#: What every region says of its own extremes, which are not shown here.
_OF_EXTREMES = "no-uncertainty"


class RegionContrastSettings(Settings):
    """Settings of the contrast of regions."""

    noise: Literal["background", "mean", "sum"] = Field(
        "background",
        title="Noise of the CNR",
        description="background: the background's SD; mean: the root mean square of both SDs; sum:"
        " the root of the sum of both squares",
    )
    coverage: Literal["area", "center"] = Field(
        "area",
        title="Pixel weighting",
        description="area: border pixels count by the exact fraction inside; center: a pixel"
        " counts whole if its centre lies inside",
    )


class MeasureRegionContrast(Measurement):
    """The first region is the object, all others are its background."""

    name: ClassVar[str] = "region_contrast"
    title: ClassVar[str] = "Contrast of regions"
    summary: ClassVar[str] = (
        "Difference, contrast, CNR and SNR of the first region against the others."
    )
    settings_type: ClassVar[type[Settings]] = RegionContrastSettings
    result_type: ClassVar[type[Result]] = RegionContrast
    regions: ClassVar[RegionNeed] = RegionNeed(BODIES, at_least=2, together=True, thresholds=True)
    columns: ClassVar[tuple[str, ...]] = ("difference", "contrast", "cnr", "detail_snr", "noise")

    def measure(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> RegionContrast | NotMeasured:
        """Measure the first region against the others."""
        wanted = cast("RegionContrastSettings", settings)
        pixels, statistics = [], []
        for i, region in enumerate(regions):
            words = _words(region, i)
            found = gather_enough(volume, region, rule=wanted.coverage)
            if isinstance(found, NotMeasured):
                return replace(found, reason=f"{words}: {found.reason}")
            answer = region_statistics(
                found.values, found.weights, spacing_mm=found.spacing_mm, unit=volume.unit
            )
            if isinstance(answer, NotMeasured):
                return replace(answer, reason=f"{words}: {answer.reason}")
            pixels.append(found)
            statistics.append(answer)
        result = region_contrast(statistics[0], statistics[1:], noise=wanted.noise)
        return replace(result, cautions=tuple(_all(volume, regions, pixels, statistics)))


def _words(region: Region, place: int) -> str:
    return region.name or ("the object" if place == 0 else f"background {place}")


def _all(
    volume: Volume,
    regions: Sequence[Region],
    pixels: Sequence[Gathered],
    statistics: Sequence[RegionStatistics],
) -> list[Caution]:
    """Return the volume's cautions, each region's with its name, and those of the pairs."""
    found = list(volume.cautions)
    own = set(volume.cautions)
    for i, (region, one, answer) in enumerate(zip(regions, pixels, statistics, strict=True)):
        words = _words(region, i)
        found += [
            replace(caution, text=f"{words[:1].upper()}{words[1:]}: {caution.text}")
            for caution in (*one.cautions, *answer.cautions)
            if caution not in own and caution.code != _OF_EXTREMES
        ]
    for i in range(1, len(regions)):
        found += _pair(pixels[0], pixels[i], (_words(regions[0], 0), _words(regions[i], i)))
    return found


def _pair(one: Gathered, other: Gathered, words: tuple[str, str]) -> list[Caution]:
    found = []
    both = shared(one, other)
    if both > OVERLAP:
        found.append(
            Caution(
                "regions-overlap",
                f"{words[0][:1].upper()}{words[0][1:]} and {words[1]} share {100 * both:.0f} % of"
                " the smaller one.",
                "Move them apart.",
            )
        )
    sizes = sorted((float(one.weights.sum()), float(other.weights.sum())))
    if sizes[1] > UNLIKE * sizes[0]:
        found.append(
            Caution(
                "unlike-sizes",
                f"{words[0][:1].upper()}{words[0][1:]} and {words[1]} differ in size by a factor of"
                f" {sizes[1] / sizes[0]:.1f}.",
            )
        )
    return found
