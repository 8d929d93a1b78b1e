"""Statistics of every label of a label map, as one table."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, ClassVar, Literal, cast

import numpy as np
from pydantic import Field

from ct_measure_plugin.measurements.base import Measurement, RegionNeed, Settings
from ct_measure_plugin.measurements.gather import Lost, left_out
from ct_measure_plugin.measurements.label_grid import PlacedLabels, place_labels
from ct_measure_plugin.physics.label_statistics import (
    LabelStatistics,
    NoiseModel,
    label_statistics,
)
from ct_measure_plugin.physics.results import Caution, NotMeasured, Result

if TYPE_CHECKING:
    from collections.abc import Sequence
    from typing import Any

    from numpy.typing import NDArray

    from ct_measure_plugin.physics.regions import Labels, Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["LabelStatisticsSettings", "MeasureLabelStatistics"]


class LabelStatisticsSettings(Settings):
    """Settings of label statistics."""

    noise: Literal["region", "independent"] = Field(
        "region",
        title="Uncertainty",
        description="region: each label's standard error from its own noise and its correlation;"
        " independent: pixels count as independent, which takes no time and is wrong in most CT",
    )


class MeasureLabelStatistics(Measurement):
    """Mean, SD, percentiles and shape of the pixels of every label."""

    name: ClassVar[str] = "label_statistics"
    title: ClassVar[str] = "Label statistics"
    summary: ClassVar[str] = "Mean, SD, percentiles and volume of every label of a label map."
    settings_type: ClassVar[type[Settings]] = LabelStatisticsSettings
    result_type: ClassVar[type[Result]] = LabelStatistics
    regions: ClassVar[RegionNeed] = RegionNeed(("labels",), thresholds=True)
    columns: ClassVar[tuple[str, ...]] = ("count", "n", "size")

    def measure(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> LabelStatistics | NotMeasured:
        """Measure all labels of one map."""
        wanted = cast("LabelStatisticsSettings", settings)
        return _measured(volume, cast("Labels", regions[0]), wanted.noise)

    def glance(
        self,
        volume: Volume,
        regions: Sequence[Region],
        settings: Settings,  # noqa: ARG002 - they only say how uncertainties are found
    ) -> LabelStatistics | NotMeasured:
        """Return the numbers of all labels without their uncertainties."""
        return _measured(volume, cast("Labels", regions[0]), "none")


def _measured(volume: Volume, region: Labels, noise: NoiseModel) -> LabelStatistics | NotMeasured:
    placed = place_labels(region, volume)
    box = _box(placed.labels)
    if box is None:
        if region.labels.any():
            return NotMeasured("the labels lie outside the volume", "choose the map drawn on it")
        return NotMeasured("the label map holds no label", "paint one, or choose another map")
    planes = placed.slices[box[0].start : box[0].stop]
    values = np.stack([np.asarray(volume.hu[k, box[1], box[2]]) for k in planes])
    labels = np.array(placed.labels[box])
    lost = _leave_out(volume, region, planes, values, labels, placed.outside)
    cautions = (*volume.cautions, *_resampled(placed), *left_out(lost, region, volume))
    spacing: tuple[float, ...] = volume.spacing_mm
    if volume.shape[0] == 1:
        values, labels, spacing = values[0], labels[0], spacing[1:]
    result = label_statistics(
        values,
        labels,
        spacing_mm=spacing,
        unit=volume.unit,
        names=dict(region.names),
        noise=noise,
    )
    return replace(result, cautions=(*cautions, *result.cautions))


def _box(labels: NDArray[Any]) -> tuple[slice, slice, slice] | None:
    """Return the smallest box that holds every label."""
    sides = []
    for axis in range(3):
        used = np.flatnonzero(labels.any(axis=tuple(a for a in range(3) if a != axis)))
        if not len(used):
            return None
        sides.append(slice(int(used[0]), int(used[-1]) + 1))
    return sides[0], sides[1], sides[2]


def _leave_out(
    volume: Volume,
    region: Labels,
    planes: list[int],
    values: NDArray[Any],
    labels: NDArray[Any],
    outside: float,
) -> Lost:
    """Take padding, saturation and what lies beyond the range of values out of the labels."""
    padded = clipped = beyond = 0
    for k, plane, own in zip(planes, values, labels, strict=True):
        padding = volume.padding(k, plane)
        if padding is not None:
            padded += _drop(own, padding)
        if region.values is not None:
            low, high = region.values
            beyond += _drop(own, ~((plane >= low) & (plane <= high)))
        if volume.representable_hu is not None:
            low, high = volume.representable_hu
            clipped += _drop(own, (plane <= low) | (plane >= high))
    return Lost(outside, padded, clipped, beyond, int(np.count_nonzero(labels)))


def _drop(labels: NDArray[Any], which: NDArray[np.bool_]) -> int:
    gone = which & (labels != 0)
    labels[gone] = 0
    return int(np.count_nonzero(gone))


def _resampled(placed: PlacedLabels) -> list[Caution]:
    if not placed.resampled:
        return []
    return [
        Caution(
            "labels-resampled",
            "The label map has its own grid; each voxel took the label at its centre.",
        )
    ]
