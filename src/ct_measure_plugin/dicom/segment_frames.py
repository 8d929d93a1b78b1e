"""The frames of a DICOM Segmentation, each at its place on a Volume's grid.

Only what says where the frames are and what the segments mean is read; the patient is not.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from ct_measure_plugin.dicom import tags
from ct_measure_plugin.dicom.frame_lattice import Lattice, frame_geometry
from ct_measure_plugin.dicom.header import UnreadableFileError, read_header
from ct_measure_plugin.dicom.layout import MAX_PLANE_PIXELS
from ct_measure_plugin.dicom.quiet import contained
from ct_measure_plugin.errors import SeriesError

if TYPE_CHECKING:
    import os
    from collections.abc import Iterator

    from numpy.typing import NDArray
    from pydicom.dataset import Dataset

    from ct_measure_plugin.physics.volume import Volume

__all__ = ["PlacedFrame", "SegmentFrames", "SegmentLink", "read_segment_frames"]

_CLASSES: Final = frozenset({"1.2.840.10008.5.1.4.1.1.66.4", "1.2.840.10008.5.1.4.1.1.66.7"})
#: a thousand labels on a thousand slices; bounds what a hostile header can claim
MAX_FRAMES: Final = 1 << 20
DAMAGED: Final = "the segmentation is damaged and cannot be read"
#: what is read of the file; nothing of the patient
_READ: Final = (
    "SpecificCharacterSet",
    "SOPClassUID",
    "SOPInstanceUID",
    "StudyInstanceUID",
    "SeriesInstanceUID",
    "FrameOfReferenceUID",
    "Modality",
    "ImageType",
    "ManufacturerModelName",
    "NumberOfFrames",
    "Rows",
    "Columns",
    "SamplesPerPixel",
    "PhotometricInterpretation",
    "BitsAllocated",
    "BitsStored",
    "HighBit",
    "PixelRepresentation",
    "SegmentationType",
    "SegmentationFractionalType",
    "MaximumFractionalValue",
    "SegmentSequence",
    "SegmentsOverlap",
    "DimensionOrganizationSequence",
    "DimensionOrganizationType",
    "DimensionIndexSequence",
    "SharedFunctionalGroupsSequence",
    "PerFrameFunctionalGroupsSequence",
    "ReferencedSeriesSequence",
    "PixelData",
)


@dataclass(frozen=True, slots=True)
class SegmentLink:
    """What a report needs to point at a segment; it holds UIDs, so it stays in memory.

    Attributes
    ----------
    sop_class, instance_uid, series_uid : str
        The segmentation object and its series.
    number : int
        The segment in it.
    tracking_uid, tracking_id : str
        The names by which the segment is followed from object to object; may be empty.
    """

    sop_class: str = field(repr=False)
    instance_uid: str = field(repr=False)
    series_uid: str = field(repr=False)
    number: int
    tracking_uid: str = field(repr=False, default="")
    tracking_id: str = field(repr=False, default="")


@dataclass(frozen=True, slots=True, eq=False)
class PlacedFrame:
    """One frame on the grid.

    Attributes
    ----------
    index : int
        The slice.
    rows, columns : slice
        Where its pixels go.
    """

    index: int
    rows: slice
    columns: slice
    _plane: NDArray[Any] = field(repr=False)
    _segment: int | None
    _threshold: float

    def segments(self) -> Iterator[tuple[int, NDArray[np.bool_]]]:
        """Yield each segment in the frame and where it is, shape of `rows` by `columns`."""
        if self._segment is not None:
            yield self._segment, self._plane >= self._threshold
            return
        for number in np.unique(self._plane):
            if number:
                yield int(number), self._plane == number


@dataclass(slots=True, eq=False)
class SegmentFrames:
    """A segmentation file; iterating reads its frames one by one.

    Attributes
    ----------
    items : dict of int to Dataset
        The file's description of each segment.
    own : bool
        True if this package wrote the file.
    outside : int
        Frames passed over because they lie wholly outside the grid.
    """

    items: dict[int, Dataset]
    own: bool
    sop_class: str = field(repr=False)
    instance_uid: str = field(repr=False)
    series_uid: str = field(repr=False)
    _image: Any = field(repr=False)
    _grid: Volume = field(repr=False)
    outside: int = 0

    def link(self, segment: int) -> SegmentLink:
        """Return what a report needs to point at a segment."""
        item = self.items[segment]
        return SegmentLink(
            self.sop_class,
            self.instance_uid,
            self.series_uid,
            segment,
            str(item.get("TrackingUID", "")),
            str(item.get("TrackingID", "")),
        )

    def __iter__(self) -> Iterator[PlacedFrame]:
        groups = self._image.PerFrameFunctionalGroupsSequence
        shared = self._image.SharedFunctionalGroupsSequence[0]
        kind = str(self._image.SegmentationType)
        lattice = Lattice(self._grid)
        half = (
            0.5 * float(self._image.get("MaximumFractionalValue", 1)) if kind == "FRACTIONAL" else 1
        )
        shape = (int(self._image.Rows), int(self._image.Columns))
        for number, group in enumerate(groups, start=1):
            segment = None if kind == "LABELMAP" else _segment_of(group, shared)
            place = lattice.place(frame_geometry(group, shared), shape)
            if place is None:
                self.outside += 1
                continue
            plane = np.asarray(self._image.get_stored_frame(number))
            turned = (plane.T if place.swapped else plane)[place.take]
            yield PlacedFrame(place.index, place.rows, place.columns, turned, segment, half)


def read_segment_frames(path: str | os.PathLike[str], grid: Volume) -> SegmentFrames:
    """Open a segmentation to place its frames on a grid.

    Raises
    ------
    SeriesError
        If the file is no segmentation, or is damaged, or the grid has no place in a patient.
    """
    if grid.affine_lps is None:
        raise SeriesError("the volume has no place in a patient, so a segmentation has none on it")
    _require_segmentation(path)
    with contained(DAMAGED):
        return _opened(path, grid)


def _require_segmentation(path: str | os.PathLike[str]) -> None:
    wanted = frozenset(
        {tags.SOP_CLASS, tags.MODALITY, tags.ROWS, tags.COLUMNS, tags.FRAMES, tags.BITS_ALLOCATED}
        | tags.PIXEL_TAGS
    )
    try:
        header = read_header(path, wanted)
    except UnreadableFileError as problem:
        raise SeriesError(f"the segmentation cannot be read: {problem.reason}") from None
    except OSError:
        raise SeriesError("the segmentation cannot be opened") from None
    elements = header.elements
    if elements.text(tags.SOP_CLASS) not in _CLASSES:
        raise SeriesError("the file is not a DICOM segmentation")
    whole = elements.whole
    rows, columns, bits = whole(tags.ROWS), whole(tags.COLUMNS), whole(tags.BITS_ALLOCATED)
    frames = whole(tags.FRAMES) or 1
    if (
        not rows
        or not columns
        or not 0 < rows * columns <= MAX_PLANE_PIXELS
        or bits not in (1, 8, 16)
    ):
        raise SeriesError("the segmentation has an impossible size")
    if not 0 < frames <= MAX_FRAMES or tags.PIXELS not in elements:
        raise SeriesError("the segmentation has no frames, or more than can be")


def _opened(path: str | os.PathLike[str], grid: Volume) -> SegmentFrames:
    from highdicom.seg import Segmentation
    from pydicom import dcmread

    ds = dcmread(path, specific_tags=list(_READ))
    own = str(ds.get("ManufacturerModelName", "")) == "ct_measure_plugin"
    image = Segmentation.from_dataset(ds, copy=False)
    items: dict[int, Dataset] = {int(one.SegmentNumber): one for one in image.SegmentSequence}
    items.pop(0, None)  # the background of a label map
    names = (str(image.SOPClassUID), str(image.SOPInstanceUID), str(image.SeriesInstanceUID))
    return SegmentFrames(items, own, *names, image, grid)


def _segment_of(group: Dataset, shared: Dataset) -> int:
    holder = group if "SegmentIdentificationSequence" in group else shared
    return int(holder.SegmentIdentificationSequence[0].ReferencedSegmentNumber)
