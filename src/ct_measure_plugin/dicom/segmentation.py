"""Label maps as DICOM Segmentation objects (PS3.3, A.51), written for a series or read onto one."""

from __future__ import annotations

import os
import re
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Final, Literal

import numpy as np

from ct_measure_plugin.dicom.codes import OWN_SCHEME, REGION, Code, LabelClass, code_in
from ct_measure_plugin.dicom.quiet import contained
from ct_measure_plugin.dicom.segment_frames import (
    DAMAGED,
    SegmentFrames,
    SegmentLink,
    read_segment_frames,
)
from ct_measure_plugin.dicom.source_images import (
    SourceImages,
    equipment,
    grid_of,
    new_uid,
    source_images,
    written,
)
from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.results import Caution
from ct_measure_plugin.physics.volume import Volume

if TYPE_CHECKING:
    from collections.abc import Mapping
    from pathlib import Path

    from numpy.typing import NDArray
    from pydicom.dataset import Dataset

    from ct_measure_plugin.dicom.entries import SeriesEntry

__all__ = ["LabelMap", "read_segmentation", "write_segmentation"]

#: labels are numbered in 16 bits
HIGHEST_LABEL: Final = 65_535
#: the label's own number, where segments have to be numbered 1, 2, 3, …
_OWN_NUMBER: Final = re.compile(r"Label (\d{1,5})")
_RLE: Final = "1.2.840.10008.1.2.5"
_PLAIN: Final = "1.2.840.10008.1.2.1"


@dataclass(frozen=True, slots=True, eq=False)
class LabelMap:
    """Labels on a Volume's grid.

    Attributes
    ----------
    labels : ndarray of uint16, shape (nz, ny, nx)
        0 where nothing is labelled.
    classes : dict of int to LabelClass
        What each label stands for. Names are free text that people gave.
    links : dict of int to SegmentLink
        Where each label is in the file.
    cautions : tuple of Caution
        What a reader of the labels must know.
    """

    labels: NDArray[np.uint16]
    classes: dict[int, LabelClass]
    links: dict[int, SegmentLink] = field(repr=False)
    cautions: tuple[Caution, ...] = ()


def write_segmentation(
    path: str | os.PathLike[str],
    entry: SeriesEntry,
    labels: NDArray[Any],
    classes: Mapping[int, LabelClass] | None = None,
    *,
    encoding: Literal["binary", "labelmap"] = "binary",
    anonymous: bool = False,
    description: str = "",
) -> Path:
    """Write a label map as a DICOM Segmentation that refers to the images of a series.

    Parameters
    ----------
    path : path
        The file to write; one of that name is replaced.
    entry : SeriesEntry
        The series that the labels were drawn on.
    labels : ndarray of int, shape (nz, ny, nx)
        On the grid of the series' Volume; 0 is background, 65535 the highest label.
    classes : mapping of int to LabelClass, optional
        Names and codes; a label without one is called by its number.
    encoding : {"binary", "labelmap"}, optional
        A bit plane for every label and slice, which every program reads, or one compressed label
        map, which is small however many labels there are, and which few programs read so far.
    anonymous : bool, optional
        True leaves names, numbers and dates of patient and study empty. UIDs stay: the object
        would refer to nothing without them.
    description : str, optional
        Content Description, at most 64 characters.

    Returns
    -------
    Path
        The file.

    Raises
    ------
    ArgumentError
        If the labels do not fit the series, or there are none.
    SeriesError
        If the series cannot be referred to, or the file not be written.

    Notes
    -----
    By DICOM's rule the file repeats patient and study of its source images, unless anonymous.
    """
    numbers, small = _checked(labels, entry)
    classes = dict(classes or {})
    named = {number: classes.get(number, LabelClass(f"Label {number}")) for number in numbers}
    sources = source_images(entry, anonymous=anonymous)
    if encoding == "binary":
        places = np.searchsorted(np.array([0, *numbers]), small)
        pixels = places.astype(np.uint8 if len(numbers) < 256 else np.uint16)
        segments = {k: (number, named[number]) for k, number in enumerate(numbers, start=1)}
    elif encoding == "labelmap":
        pixels = small.astype(np.uint8 if numbers[-1] < 256 else np.uint16)
        segments = {number: (number, named[number]) for number in numbers}
    else:
        raise ArgumentError("encoding", "must be 'binary' or 'labelmap'", encoding)

    def make() -> Dataset:
        return _object(sources, pixels, segments, encoding, description, equipment(entry))

    return written(path, make, sources.facts)


def _checked(labels: NDArray[Any], entry: SeriesEntry) -> tuple[list[int], NDArray[Any]]:
    """Return the labels that occur, increasing, and the map."""
    labels = np.asarray(labels)
    shape = (entry.slice_count, *entry.matrix)
    if labels.shape != shape:
        raise ArgumentError("labels", f"must have the shape of the series {shape}", labels.shape)
    if labels.dtype.kind not in "iub":
        raise ArgumentError("labels", "must hold whole numbers", str(labels.dtype))
    low, high = int(labels.min()), int(labels.max())
    if low < 0 or high > HIGHEST_LABEL:
        raise ArgumentError("labels", f"must lie between 0 and {HIGHEST_LABEL}", (low, high))
    if high == 0:
        raise ArgumentError("labels", "must label at least one voxel", "none")
    counts = np.bincount(labels.ravel().astype(np.uint16, copy=False))
    return [int(n) for n in np.flatnonzero(counts) if n], labels


def _object(
    sources: SourceImages,
    pixels: NDArray[Any],
    segments: dict[int, tuple[int, LabelClass]],
    encoding: str,
    description: str,
    made_by: dict[str, Any],
) -> Dataset:
    from highdicom.seg import Segmentation, SegmentDescription

    described = []
    for segment, (number, label) in segments.items():
        item = SegmentDescription(
            segment,
            label.name,
            label.category_or_own.concept(),
            label.kind_or_own.concept(),
            "MANUAL",
            tracking_uid=new_uid(),
            tracking_id=label.name,
        )
        item.SegmentDescription = f"Label {number}"
        described.append(item)
    ds = Segmentation(
        sources.datasets,
        pixels,
        encoding.upper(),
        described,
        transfer_syntax_uid=_RLE if encoding == "labelmap" else _PLAIN,
        content_description=description or None,
        content_label="CT_MEASURE",
        **made_by,
    )
    if sources.frames:
        _number_frames(ds, sources.frames)
    return ds


def _number_frames(ds: Dataset, frames: tuple[int, ...]) -> None:
    """Refer to each frame by its number in the file, not by its place in the Volume."""
    references = {
        id(source): source  # segments on the same slice share it
        for group in ds.PerFrameFunctionalGroupsSequence
        for derivation in group.DerivationImageSequence
        for source in derivation.SourceImageSequence
    }
    for source in references.values():
        source.ReferencedFrameNumber = frames[int(source.ReferencedFrameNumber) - 1]


def read_segmentation(path: str | os.PathLike[str], onto: SeriesEntry | Volume) -> LabelMap:
    """Read a DICOM Segmentation onto the grid of a series.

    Frames are placed by position, orientation and pixel spacing, whatever images the file refers
    to: a segmentation that was cropped, flipped or written by another program comes out right, and
    one that lies between the slices or pixels is refused.

    Parameters
    ----------
    path : path
        The file.
    onto : SeriesEntry or Volume
        Whose grid the labels shall have.

    Returns
    -------
    LabelMap
        A label keeps its number if this package wrote the file; else it has that of its segment.
        Where segments overlap, the higher number is kept, with a caution. A fractional segment
        holds the voxels of at least one half.

    Raises
    ------
    SeriesError
        If the file is no segmentation, is damaged, or lies on another grid.
    """
    grid = onto if isinstance(onto, Volume) else grid_of(onto)
    frames = read_segment_frames(path, grid)
    labels = np.zeros(grid.shape, np.uint16)
    with contained(DAMAGED):
        return _filled(labels, frames)


def _filled(labels: NDArray[np.uint16], frames: SegmentFrames) -> LabelMap:
    numbers = _numbers(frames)
    overlaps = 0
    for place in frames:
        plane = labels[place.index]
        for segment, inside in place.segments():
            number = numbers.get(segment)
            if number is None:
                continue
            target = plane[place.rows, place.columns]
            overlaps += int(np.count_nonzero(inside & (target != 0) & (target != number)))
            np.copyto(target, np.uint16(number), where=inside & (target < number))
    return LabelMap(
        labels,
        {numbers[segment]: _class_of(item) for segment, item in frames.items.items()},
        {numbers[segment]: frames.link(segment) for segment in frames.items},
        tuple(_cautions(overlaps, frames.outside)),
    )


def _numbers(frames: SegmentFrames) -> dict[int, int]:
    """Return the label of each segment: its own if this package wrote it, else the segment's."""
    plain = {segment: segment for segment in frames.items}
    if not frames.own:
        return plain
    kept: dict[int, int] = {}
    for segment, item in frames.items.items():
        match = _OWN_NUMBER.fullmatch(str(item.get("SegmentDescription", "")))
        if match is None or not 0 < int(match[1]) <= HIGHEST_LABEL:
            return plain
        kept[segment] = int(match[1])
    return kept if len(set(kept.values())) == len(kept) else plain


def _class_of(item: Dataset) -> LabelClass:
    text = str(item.get("SegmentLabel", ""))
    name = " ".join("".join(c if c.isprintable() and c != "\\" else " " for c in text).split())
    return LabelClass(
        name[:64].strip() or f"Segment {int(item.SegmentNumber)}",
        _foreign(item, "SegmentedPropertyTypeCodeSequence"),
        _foreign(item, "SegmentedPropertyCategoryCodeSequence"),
    )


def _foreign(item: Dataset, sequence: str) -> Code | None:
    """Return a code that somebody gave; None for those that stand for "none given"."""
    code = code_in(item[sequence].value[0] if item.get(sequence) else None)
    return None if code is None or code.scheme == OWN_SCHEME or code == REGION else code


def _cautions(overlaps: int, outside: int) -> list[Caution]:
    cautions = []
    if overlaps:
        cautions.append(
            Caution(
                "segments-overlap",
                f"Segments share {overlaps} voxels; the higher number was kept there.",
                "Read the segments one by one if both are wanted.",
            )
        )
    if outside:
        cautions.append(
            Caution(
                "segmentation-outside",
                f"{outside} frames of the segmentation lie outside the volume and were left out.",
                "Read the segmentation onto the series that it was drawn on.",
            )
        )
    return cautions
