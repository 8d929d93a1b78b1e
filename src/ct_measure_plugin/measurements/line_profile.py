"""The profile along each segment or path, or along each polygon's outline."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING, ClassVar, Literal, cast

import numpy as np
from pydantic import Field

from ct_measure_plugin.measurements.base import Measurement, RegionNeed, Settings
from ct_measure_plugin.physics.coverage import slices_of
from ct_measure_plugin.physics.line_profile import LineProfile, line_profile
from ct_measure_plugin.physics.regions import Path, Polygon, Segment
from ct_measure_plugin.physics.results import NotMeasured, Result

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

    Floats = NDArray[np.float64]

__all__ = ["LineProfileSettings", "MeasureLineProfile"]

#: Pixels around the path that cubic interpolation may look at: its weights fall by 3.7 a pixel.
MARGIN = 12


class LineProfileSettings(Settings):
    """Settings of the line profile."""

    interpolation: Literal["cubic", "linear", "nearest"] = Field(
        "cubic",
        description="how values between pixels are found: cubic for widths, linear for a quick"
        " look, nearest for the pixels as they are",
    )
    width_mm: float | None = Field(
        None,
        ge=0,
        title="Width (mm)",
        description="width across the line over which values are averaged; the line's own width if"
        " not set",
    )
    step_mm: float | None = Field(
        None,
        gt=0,
        title="Step (mm)",
        description="distance between points; a tenth of a pixel if not set",
    )
    level: float | None = Field(
        None,
        description="value whose crossings are wanted; half-way up the edge or peak if not set",
    )


class MeasureLineProfile(Measurement):
    """Values along a line or path, and the width of the edge or peak that it crosses."""

    name: ClassVar[str] = "line_profile"
    title: ClassVar[str] = "Line profile"
    summary: ClassVar[str] = "Values along a line, with the width of the edge or peak it crosses."
    settings_type: ClassVar[type[Settings]] = LineProfileSettings
    result_type: ClassVar[type[Result]] = LineProfile
    regions: ClassVar[RegionNeed] = RegionNeed(("segment", "path", "polygon"))
    columns: ClassVar[tuple[str, ...]] = ("edge_width", "fwhm", "height", "step", "length")

    def measure(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> LineProfile | NotMeasured:
        """Measure along one segment, path or outline; its slices are averaged."""
        wanted = cast("LineProfileSettings", settings)
        region = cast("Segment | Path | Polygon", regions[0])
        points, own_width = _path(region)
        width = own_width if wanted.width_mm is None else wanted.width_mm
        slices = slices_of(region, volume)
        rows, columns = _crop(volume, points, width)
        if not slices or rows.stop <= rows.start or columns.stop <= columns.start:
            return NotMeasured(
                "the line lies outside the volume", "move it onto the image", volume.cautions
            )
        planes = [np.asarray(volume.hu[k, rows, columns], dtype=float) for k in slices]
        first = (
            volume.origin_mm[1] + rows.start * volume.spacing_mm[1],
            volume.origin_mm[2] + columns.start * volume.spacing_mm[2],
        )
        for k, plane in zip(slices, planes, strict=True):
            padding = volume.padding(k, plane)
            if (padding is not None and padding.any()) or not np.isfinite(plane).all():
                return NotMeasured(
                    "padding, or pixels without a finite value, lie on the line or near it",
                    "draw it within the reconstructed circle",
                    volume.cautions,
                )
        found = line_profile(
            np.asarray(planes),
            [(y - first[0], x - first[1]) for y, x in points],
            spacing_mm=volume.spacing_mm[1:],
            width_mm=width,
            order=cast(
                "Literal[0, 1, 3]", {"nearest": 0, "linear": 1, "cubic": 3}[wanted.interpolation]
            ),
            step_mm=wanted.step_mm,
            level=wanted.level,
            unit=volume.unit,
        )
        return replace(found, cautions=(*volume.cautions, *found.cautions))


def _path(region: Segment | Path | Polygon) -> tuple[list[tuple[float, float]], float]:
    """Return the corners and the width of a line or path, or of a polygon's closed outline."""
    if isinstance(region, Path):
        return list(region.vertices_mm), region.width_mm
    if isinstance(region, Segment):
        return [region.start_mm, region.end_mm], region.width_mm
    return [*region.vertices_mm, region.vertices_mm[0]], 0.0


def _crop(volume: Volume, points: list[tuple[float, float]], width: float) -> tuple[slice, slice]:
    """Return the rows and columns that the path and what interpolates it lie on."""
    corners = np.asarray(points)
    spans = []
    for axis in (0, 1):
        step, origin = volume.spacing_mm[1 + axis], volume.origin_mm[1 + axis]
        low = (corners[:, axis].min() - width / 2 - origin) / step
        high = (corners[:, axis].max() + width / 2 - origin) / step
        count = volume.shape[1 + axis]
        start = min(max(math.floor(low) - MARGIN, 0), count)
        spans.append(slice(start, max(min(math.ceil(high) + MARGIN + 1, count), start)))
    return spans[0], spans[1]
