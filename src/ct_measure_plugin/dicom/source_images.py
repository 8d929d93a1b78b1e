"""A series as the objects that a written DICOM object refers to.

They are made from what reading knows of the slices, and hold nothing of the patient: what the
DICOM library makes of them, logs or complains of cannot name anybody. The identity is added to the
finished object, if it is wanted there.
"""

from __future__ import annotations

import os
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from ct_measure_plugin.dicom.identity import StudyFacts, give_identity, study_facts
from ct_measure_plugin.dicom.quiet import contained
from ct_measure_plugin.errors import SeriesError

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from pydicom.dataset import Dataset

    from ct_measure_plugin.dicom.entries import SeriesEntry
    from ct_measure_plugin.dicom.facts import ImageFacts
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["SourceImages", "equipment", "grid_of", "new_uid", "source_images", "written"]

#: attributes that an object must have, if only empty
_EMPTY: Final = (
    "PatientID",
    "PatientName",
    "PatientBirthDate",
    "PatientSex",
    "AccessionNumber",
    "StudyID",
    "ReferringPhysicianName",
)


@dataclass(frozen=True, slots=True, eq=False)
class SourceImages:
    """The slices of a series as objects to refer to; stays inside the room.

    Attributes
    ----------
    datasets : list of Dataset
        One a slice, in the Volume's order; or one multi-frame object with its frames in it.
    frames : tuple of int
        For a multi-frame file, the number that each slice has in it, from 1; else empty.
    facts : StudyFacts
        Their study and patient.
    """

    datasets: list[Dataset] = field(repr=False)
    frames: tuple[int, ...]
    facts: StudyFacts = field(repr=False)


def source_images(entry: SeriesEntry, *, anonymous: bool) -> SourceImages:
    """Return a series as objects to refer to.

    Raises
    ------
    SeriesError
        If its images lack place or UIDs, or come from several multi-frame files.
    """
    images = entry._stack.images
    if entry._geometry is None:
        raise SeriesError("the series has no position or orientation, so nothing in it has a place")
    if not all(image.instance_uid and image.series_uid for image in images):
        raise SeriesError("the source images lack the UIDs that a DICOM object must refer to")
    facts = study_facts(images[0].path, anonymous=anonymous)
    if images[0].frame_count == 1 and facts.sop_class == _CLASSIC:
        return SourceImages([_single(image, entry, facts) for image in images], (), facts)
    if len({image.path for image in images}) > 1:
        raise SeriesError(
            "the slices come from several multi-frame files, which is not written here"
        )
    frames = tuple(image.frame + 1 for image in images)
    return SourceImages([_several(images, entry, facts)], frames, facts)


_CLASSIC: Final = "1.2.840.10008.5.1.4.1.1.2"


def grid_of(entry: SeriesEntry) -> Volume:
    """Return the series' geometry as a Volume whose values nobody has read (all are 0)."""
    from ct_measure_plugin.dicom.read import volume_of

    rows, columns = entry.matrix
    blank = np.broadcast_to(np.int16(0), (entry.slice_count, rows, columns))
    return volume_of(entry, blank, (), entry.cautions, None)


def _decimals(values: Any) -> list[Any]:
    from pydicom.valuerep import DS

    return [DS(float(value), auto_format=True) for value in values]


def _common(image: ImageFacts, entry: SeriesEntry, facts: StudyFacts) -> Dataset:
    from pydicom.dataset import Dataset

    ds = Dataset()
    ds.SpecificCharacterSet = "ISO_IR 192"
    ds.SOPClassUID, ds.SOPInstanceUID = facts.sop_class, image.instance_uid
    ds.StudyInstanceUID, ds.SeriesInstanceUID = facts.study_uid, image.series_uid
    ds.FrameOfReferenceUID = facts.frame_uid
    ds.Modality = "CT"
    ds.Rows, ds.Columns = entry.matrix
    ds.LossyImageCompression = "01" if image.lossy else "00"
    for name in _EMPTY:
        setattr(ds, name, "")
    ds.StudyDate = ds.StudyTime = None
    return ds


def _single(image: ImageFacts, entry: SeriesEntry, facts: StudyFacts) -> Dataset:
    ds = _common(image, entry, facts)
    ds.ImagePositionPatient = _decimals(image.position)
    ds.ImageOrientationPatient = _cosines(entry)
    ds.PixelSpacing = _decimals(entry.spacing_mm[1:])
    ds.SliceThickness = _decimals([_thickness(entry)])[0]
    return ds


def _several(images: list[ImageFacts], entry: SeriesEntry, facts: StudyFacts) -> Dataset:
    from pydicom.dataset import Dataset

    def item(**values: Any) -> list[Dataset]:
        made = Dataset()
        for name, value in values.items():
            setattr(made, name, value)
        return [made]

    ds = _common(images[0], entry, facts)
    ds.NumberOfFrames = len(images)
    shared = Dataset()
    shared.PlaneOrientationSequence = item(ImageOrientationPatient=_cosines(entry))
    shared.PixelMeasuresSequence = item(
        PixelSpacing=_decimals(entry.spacing_mm[1:]),
        SliceThickness=_decimals([_thickness(entry)])[0],
    )
    ds.SharedFunctionalGroupsSequence = [shared]
    ds.PerFrameFunctionalGroupsSequence = [
        item(PlanePositionSequence=item(ImagePositionPatient=_decimals(image.position)))[0]
        for image in images
    ]
    return ds


def _cosines(entry: SeriesEntry) -> list[Any]:
    geometry = entry._geometry
    assert geometry is not None  # noqa: S101 - refused in source_images
    return _decimals([*geometry.frame.x, *geometry.frame.y])


def _thickness(entry: SeriesEntry) -> float:
    return entry.thickness_mm[0] if entry.thickness_mm else entry.spacing_mm[0]


def new_uid() -> str:
    """Return a UID that no other object has."""
    from pydicom.uid import generate_uid

    return str(generate_uid())


def equipment(entry: SeriesEntry) -> dict[str, Any]:
    """Return what says by which software, and as which series, an object was made."""
    from importlib.metadata import version

    return {
        "series_instance_uid": new_uid(),
        "sop_instance_uid": new_uid(),
        "series_number": _number_beside(entry.series_number),
        "instance_number": 1,
        "manufacturer": "ct_measure_plugin contributors",
        "manufacturer_model_name": "ct_measure_plugin",
        "software_versions": version("ct-measure-plugin"),
        "device_serial_number": "0",
        "specific_character_set": "ISO_IR 192",
    }


def _number_beside(number: int) -> int:
    """Return the source's number with two digits behind it, so that lists show them together."""
    return 100 * number + 1 if 0 <= number < 10_000_000 else 1


def written(path: str | os.PathLike[str], make: Callable[[], Dataset], facts: StudyFacts) -> Path:
    """Make an object, give it its identity and write it; a file of that name is replaced whole.

    Raises
    ------
    SeriesError
        If it cannot be made or written. The text is this package's own.
    """
    from pathlib import Path

    target = Path(path)
    part = target.with_name(f".{target.name}.{os.getpid()}.part")
    with contained("the DICOM object cannot be made from this series", nameless=True):
        ds = make()
    try:
        with contained("the file cannot be written: an element cannot be encoded"):
            give_identity(ds, facts)
            _saved(ds, part, target)
    finally:
        part.unlink(missing_ok=True)
    return target


def _saved(ds: Dataset, part: Path, target: Path) -> None:
    try:
        ds.save_as(part, enforce_file_format=True)
        os.replace(part, target)
    except OSError as problem:
        reason = os.strerror(problem.errno).lower() if problem.errno else "the disk refused"
        raise SeriesError(f"the file cannot be written: {reason}") from None
