"""Measurements as a DICOM Structured Report (PS3.16, TID 1500), drawn on the images measured.

Each measured region becomes a group of numbers with its outline on the slices, or with the segment
it was measured on. Numbers keep their unit and their standard uncertainty.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

from ct_measure_plugin.dicom.codes import OWN_SCHEME, Code, LabelClass, is_text, own_code
from ct_measure_plugin.dicom.outlines import Outline, outlines_of
from ct_measure_plugin.dicom.quantity_codes import name_codes, unit_code
from ct_measure_plugin.dicom.source_images import (
    SourceImages,
    equipment,
    grid_of,
    new_uid,
    source_images,
    written,
)
from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.coverage import slices_of
from ct_measure_plugin.physics.results import NotMeasured, Quantity, Result, quantities_of

if TYPE_CHECKING:
    import os
    from collections.abc import Sequence
    from pathlib import Path

    from pydicom.dataset import Dataset

    from ct_measure_plugin.dicom.entries import SeriesEntry
    from ct_measure_plugin.dicom.segment_frames import SegmentLink
    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["MeasuredRegion", "write_structured_report"]

#: the standard's name of this kind of report
_TITLE: Final = Code("126000", "DCM", "Imaging Measurement Report")
_PROCEDURE: Final = Code("77477000", "SCT", "Computed tomography")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MeasuredRegion:
    """One answer, and what it was measured on.

    Parameters
    ----------
    answer : Result or NotMeasured
        The numbers; curves and pictures have no place in this kind of report.
    measurement : str
        The measurement's name: "region_statistics", …
    region : Region, optional
        The region, in the series' image frame.
    segment : SegmentLink, optional
        The segment, if it was a label of a written segmentation: from
        :attr:`~ct_measure_plugin.dicom.segmentation.LabelMap.links`.
    label : LabelClass, optional
        What the region shows; by default what the region itself says.
    """

    answer: Result | NotMeasured
    measurement: str
    region: Region | None = None
    segment: SegmentLink | None = None
    label: LabelClass | None = None


def write_structured_report(
    path: str | os.PathLike[str],
    entry: SeriesEntry,
    measured: Sequence[MeasuredRegion],
    *,
    quantities: Sequence[str] | None = None,
    anonymous: bool = False,
) -> Path:
    """Write measurements on a series as a DICOM Structured Report (TID 1500).

    Parameters
    ----------
    path : path
        The file to write; one of that name is replaced.
    entry : SeriesEntry
        The series that was measured.
    measured : sequence of MeasuredRegion
        The answers, one group each. One that could not be measured is in the report with its
        reason.
    quantities : sequence of str, optional
        The fields to write, such as ``("mean", "sd")``; by default all that are numbers.
    anonymous : bool, optional
        True leaves names, numbers and dates of patient and study empty. UIDs stay.

    Returns
    -------
    Path
        The file.

    Raises
    ------
    ArgumentError
        If nothing was measured, or a name cannot be written.
    SeriesError
        If the series cannot be referred to, or the file not be written.

    Notes
    -----
    A group refers to the outline of its region on each slice; to its segment; or, for a mask or a
    line, to the images. Both ends of the measurement uncertainty (PS3.16, TID 310) hold the
    standard uncertainty, one sigma. Cautions are qualitative evaluations with this package's codes.
    """
    if not measured:
        raise ArgumentError("measured", "must hold at least one answer", "none")
    labels = [_label_of(one) for one in measured]
    grid = grid_of(entry)
    outlines = [
        [] if one.region is None or one.segment is not None else outlines_of(one.region, grid)
        for one in measured
    ]
    sources = source_images(entry, anonymous=anonymous)

    def make() -> Dataset:
        groups = [
            _group(one, label, drawn, _Images(sources, grid), quantities)
            for one, label, drawn in zip(measured, labels, outlines, strict=True)
        ]
        return _report(groups, measured, sources, equipment(entry))

    return written(path, make, sources.facts)


def _label_of(one: MeasuredRegion) -> LabelClass:
    if one.label is not None:
        return one.label
    region = one.region
    if region is None:
        return LabelClass(one.segment.tracking_id if one.segment else one.measurement)
    shown = region.group or region.name or region.kind
    for name in (region.name, shown):
        if name and not is_text(name):
            raise ArgumentError("name", "must be 1 to 64 printable characters", name)
    kind = Code.of(region.code, shown) if region.code else own_code("region", shown)
    return LabelClass(region.name or shown, kind)


@dataclass(frozen=True, slots=True, eq=False)
class _Images:
    """The source images, to be referred to by slice."""

    sources: SourceImages
    grid: Volume

    def of(self, index: int) -> tuple[str, str, list[int] | None]:
        """Return class, instance and frame of a slice."""
        if self.sources.frames:
            ds, frames = self.sources.datasets[0], [self.sources.frames[index]]
            return str(ds.SOPClassUID), str(ds.SOPInstanceUID), frames
        ds = self.sources.datasets[index]
        return str(ds.SOPClassUID), str(ds.SOPInstanceUID), None

    def slices(self, region: Region | None) -> list[int]:
        """Return the slices of a region, all of them where there is none."""
        everywhere = list(range(self.grid.shape[0]))
        return everywhere if region is None else slices_of(region, self.grid) or everywhere


def _group(
    one: MeasuredRegion,
    label: LabelClass,
    drawn: list[Outline],
    images: _Images,
    wanted: Sequence[str] | None,
) -> Any:
    from highdicom import sr

    common: dict[str, Any] = {
        "tracking_identifier": _tracking(one, label),
        "finding_type": label.kind_or_own.concept(),
        "method": own_code(one.measurement, one.measurement.replace("_", " ")).concept(),
        "measurements": _measurements(one.answer, wanted),
        "qualitative_evaluations": _evaluations(one.answer),
    }
    if label.category is not None:
        common["finding_category"] = label.category.concept()
    if one.segment is not None:
        return sr.VolumetricROIMeasurementsAndQualitativeEvaluations(
            referenced_segment=_segment(one.segment, images, one.region), **common
        )
    if not drawn:
        pictures = [
            sr.SourceImageForMeasurementGroup(*images.of(k)) for k in images.slices(one.region)
        ]
        return sr.MeasurementsAndQualitativeEvaluations(source_images=pictures, **common)
    regions = [
        sr.ImageRegion(o.graphic, o.points, sr.SourceImageForRegion(*images.of(o.index)))
        for o in drawn
    ]
    if len(regions) == 1:
        return sr.PlanarROIMeasurementsAndQualitativeEvaluations(
            referenced_region=regions[0], **common
        )
    return sr.VolumetricROIMeasurementsAndQualitativeEvaluations(
        referenced_regions=regions, **common
    )


def _tracking(one: MeasuredRegion, label: LabelClass) -> Any:
    from highdicom.sr import TrackingIdentifier

    if one.segment is not None and one.segment.tracking_uid:
        return TrackingIdentifier(one.segment.tracking_uid, one.segment.tracking_id or label.name)
    return TrackingIdentifier(new_uid(), label.name)


def _segment(link: SegmentLink, images: _Images, region: Region | None) -> Any:
    from highdicom import sr

    return sr.ReferencedSegment(
        link.sop_class,
        link.instance_uid,
        link.number,
        source_images=[sr.SourceImageForSegmentation(*images.of(k)) for k in images.slices(region)],
    )


def _measurements(answer: Result | NotMeasured, wanted: Sequence[str] | None) -> list[Any]:
    if isinstance(answer, NotMeasured):
        return []
    return [
        _number(name, quantity)
        for name, quantity in quantities_of(answer).items()
        if wanted is None or name in wanted
    ]


def _number(name: str, quantity: Quantity) -> Any:
    from highdicom import sr

    concept, derivation = name_codes(name, quantity.unit)
    unit = unit_code(quantity.unit).concept()
    doubt = None
    if quantity.uncertainty is not None:
        doubt = sr.MeasurementProperties(
            upper_measurement_uncertainty=float(quantity.uncertainty),
            lower_measurement_uncertainty=float(quantity.uncertainty),
        )
        for item in doubt:  # the library makes pure numbers of them
            item.MeasuredValueSequence[0].MeasurementUnitsCodeSequence = [unit]
    return sr.Measurement(
        concept.concept(),
        float(quantity.value),
        unit,
        derivation=None if derivation is None else derivation.concept(),
        properties=doubt,
    )


def _evaluations(answer: Result | NotMeasured) -> list[Any]:
    """Return cautions, and why a number is missing, as coded answers."""
    from highdicom.sr import QualitativeEvaluation

    found = [
        QualitativeEvaluation(
            own_code("caution", "Caution").concept(),
            own_code(caution.code, caution.kind.title).concept(),
        )
        for caution in answer.cautions
    ]
    if isinstance(answer, NotMeasured):
        reason = own_code("not-measured", answer.reason).concept()
        found.append(QualitativeEvaluation(own_code("result", "Not measured").concept(), reason))
    return found


def _report(
    groups: list[Any],
    measured: Sequence[MeasuredRegion],
    sources: SourceImages,
    made_by: dict[str, Any],
) -> Dataset:
    from highdicom import sr
    from highdicom.coding_schemes import CodingSchemeIdentificationItem

    device = sr.DeviceObserverIdentifyingAttributes(
        uid=new_uid(),
        name="ct_measure_plugin",
        manufacturer_name=made_by["manufacturer"],
        model_name=made_by["manufacturer_model_name"],
    )
    observer = sr.ObserverContext(Code("121007", "DCM", "Device").concept(), device)
    content = sr.MeasurementReport(
        observation_context=sr.ObservationContext(observer_device_context=observer),
        procedure_reported=_PROCEDURE.concept(),
        imaging_measurements=groups,
        title=_TITLE.concept(),
        # the library describes single-frame images only, and the standard leaves it to us
        referenced_images=None if sources.frames else sources.datasets,
    )
    own = CodingSchemeIdentificationItem(OWN_SCHEME, "ct_measure_plugin")
    return sr.ComprehensiveSR(
        [*sources.datasets, *_segmentations(measured, sources)],
        content[0],
        is_complete=True,
        is_final=False,
        coding_schemes=[own],
        **made_by,
    )


def _segmentations(measured: Sequence[MeasuredRegion], sources: SourceImages) -> list[Dataset]:
    """Return the segmentations that groups refer to, as far as evidence has to name them."""
    from pydicom.dataset import Dataset

    links = {one.segment.instance_uid: one.segment for one in measured if one.segment is not None}
    found = []
    for link in links.values():
        ds = Dataset()
        ds.StudyInstanceUID, ds.SeriesInstanceUID = sources.facts.study_uid, link.series_uid
        ds.SOPClassUID, ds.SOPInstanceUID = link.sop_class, link.instance_uid
        found.append(ds)
    return found
