"""Local noise and its most frequent level, in images that need not be uniform."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, ClassVar, cast

import numpy as np
from pydantic import Field

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.measurements.base import AREAS, Measurement, RegionNeed, Settings
from ct_measure_plugin.measurements.pixels_inside import chosen_slices, pixels_inside
from ct_measure_plugin.physics.noise_map import NoiseMap, noise_map
from ct_measure_plugin.physics.results import NotMeasured, Result

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["MeasureNoiseMap", "NoiseMapSettings"]


class NoiseMapSettings(Settings):
    """Settings of the noise map."""

    window_px: int = Field(
        11,
        ge=3,
        le=101,
        title="Window (px)",
        description="side of the square window, an odd number of pixels; levels are comparable for"
        " equal windows only",
    )
    low_hu: float = Field(
        -50.0,
        title="Lowest mean (HU)",
        description="a window counts if the mean of its pixels lies in the range; the default is"
        " water and soft tissue",
    )
    high_hu: float = Field(100.0, title="Highest mean (HU)", description="upper end of the range")


class MeasureNoiseMap(Measurement):
    """Map of local SDs and the global noise level."""

    name: ClassVar[str] = "noise_map"
    title: ClassVar[str] = "Noise map"
    summary: ClassVar[str] = "How much noise most of an image has, uniform or not, and where."
    settings_type: ClassVar[type[Settings]] = NoiseMapSettings
    result_type: ClassVar[type[Result]] = NoiseMap
    regions: ClassVar[RegionNeed] = RegionNeed(AREAS, at_least=0, together=True)
    columns: ClassVar[tuple[str, ...]] = ("global_noise", "noise_sd", "windows", "window")

    def measure(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> NoiseMap | NotMeasured:
        """Measure the slices of the regions, or all."""
        wanted = cast("NoiseMapSettings", settings)
        if wanted.window_px % 2 != 1:
            raise ArgumentError("window_px", "must be odd", wanted.window_px)
        if "lossy-compression" in {caution.code for caution in volume.cautions}:
            return NotMeasured(
                "the pixels were compressed with loss, which removes noise",
                "use the series without lossy compression",
                volume.cautions,
            )
        slices = chosen_slices(volume, regions)
        inside = pixels_inside(volume, regions, slices)
        if not slices or (inside is not None and not inside.any()):
            return NotMeasured(
                "the regions hold no pixel", "draw them within the volume", volume.cautions
            )
        whole = len(slices) == volume.shape[0]
        found = noise_map(
            volume.hu if whole else np.stack([volume.plane(k) for k in slices]),
            spacing_mm=(volume.spacing_mm[1], volume.spacing_mm[2]),
            z_mm=volume.positions_mm[slices].tolist(),
            inside=inside,
            window_px=wanted.window_px,
            range_hu=(wanted.low_hu, wanted.high_hu),
            unit=volume.unit,
        )
        if isinstance(found, NotMeasured):
            return replace(found, cautions=volume.cautions)
        origin = (volume.origin_mm[1], volume.origin_mm[2])
        return replace(
            found,
            sd_map=replace(found.sd_map, origin=origin),
            cautions=(*volume.cautions, *found.cautions),
        )
