"""Label maps go out as DICOM Segmentation and come back; another reader finds the same voxels."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import series_writer as sw
from highdicom.seg import Segmentation, SegmentDescription
from pydicom import Dataset, dcmread
from pydicom.sr.codedict import codes

from ct_measure_plugin.dicom import read_series, scan_series
from ct_measure_plugin.dicom.codes import Code, LabelClass
from ct_measure_plugin.dicom.segmentation import read_segmentation, write_segmentation
from ct_measure_plugin.errors import ArgumentError, SeriesError
from ct_measure_plugin.physics.volume import Volume

SHAPE = (5, 7, 9)  # 63 pixels a frame: bits of one frame begin inside a byte
STORED = sw.noise(SHAPE)
OBLIQUE = (0.8, 0.6, 0.0, 0.0, 0.0, -1.0)
LIVER = LabelClass("Köln 肝", Code("10200004", "SCT", "Liver"), Code("123037004", "SCT", "Body"))


def some_labels(seed: int = 3, numbers: tuple[int, ...] = (1, 2, 7, 300)) -> Any:
    rng = np.random.default_rng(seed)
    labels = rng.choice(np.array([0, 0, 0, *numbers], np.uint16), SHAPE)
    labels[2] = 0
    return labels


def entry_of(folder: Path, **changes: Any) -> Any:
    positions = changes.pop("positions", sw.line(SHAPE[0]))
    sw.write_series(folder, STORED, positions, **changes)
    (entry,) = scan_series(folder)
    return entry


def sources_of(folder: Path) -> list[Dataset]:
    """Return the source images from the feet to the head."""
    found = [dcmread(path) for path in (folder / "s").iterdir()]
    return sorted(found, key=lambda one: one.ImagePositionPatient[2])


def bits_of(ds: Dataset) -> np.ndarray:
    """Unpack one-bit frames: the first pixel is the lowest bit of the first byte (PS3.5, 8.1.1)."""
    count = int(ds.NumberOfFrames) * ds.Rows * ds.Columns
    bits = np.unpackbits(np.frombuffer(ds.PixelData, np.uint8), bitorder="little")[:count]
    return bits.reshape(-1, ds.Rows, ds.Columns).astype(bool)


def by_reference(ds: Dataset, instances: list[str]) -> dict[str, np.ndarray]:
    """Return each segment's voxels, placed by the image that each frame says it was drawn on."""
    found = {str(item.SegmentLabel): np.zeros(SHAPE, bool) for item in ds.SegmentSequence}
    names = {int(item.SegmentNumber): str(item.SegmentLabel) for item in ds.SegmentSequence}
    for plane, group in zip(bits_of(ds), ds.PerFrameFunctionalGroupsSequence, strict=True):
        source = group.DerivationImageSequence[0].SourceImageSequence[0]
        slice_index = instances.index(source.ReferencedSOPInstanceUID)
        number = group.SegmentIdentificationSequence[0].ReferencedSegmentNumber
        found[names[int(number)]][slice_index] |= plane
    return found


def test_another_reader_finds_every_voxel_of_every_label(tmp_path):
    """Nothing but the DICOM library's tags and numpy's bits is used to read."""
    entry, labels = entry_of(tmp_path / "s"), some_labels()
    file = write_segmentation(tmp_path / "seg.dcm", entry, labels, {7: LIVER})
    ds = dcmread(file)
    sources = sources_of(tmp_path)
    found = by_reference(ds, [str(one.SOPInstanceUID) for one in sources])
    names = {"Label 1": 1, "Label 2": 2, LIVER.name: 7, "Label 300": 300}
    assert set(found) == set(names)
    for name, number in names.items():
        assert np.array_equal(found[name], labels == number)
    assert ds.SOPClassUID == "1.2.840.10008.5.1.4.1.1.66.4"
    assert ds.StudyInstanceUID == sources[0].StudyInstanceUID
    assert ds.FrameOfReferenceUID == sources[0].FrameOfReferenceUID
    assert ds.SeriesInstanceUID != sources[0].SeriesInstanceUID
    for group in ds.PerFrameFunctionalGroupsSequence:
        source = group.DerivationImageSequence[0].SourceImageSequence[0]
        image = next(s for s in sources if s.SOPInstanceUID == source.ReferencedSOPInstanceUID)
        place = group.PlanePositionSequence[0].ImagePositionPatient
        assert list(place) == list(image.ImagePositionPatient)
    (coded,) = [item for item in ds.SegmentSequence if item.SegmentLabel == LIVER.name]
    kind = coded.SegmentedPropertyTypeCodeSequence[0]
    assert (kind.CodeValue, kind.CodingSchemeDesignator, kind.CodeMeaning) == (
        "10200004",
        "SCT",
        "Liver",
    )
    assert coded.SegmentedPropertyCategoryCodeSequence[0].CodeValue == "123037004"


SERIES: dict[str, dict[str, Any]] = {
    "plain": {},
    "pixels not square": {"PixelSpacing": [0.8, 0.3]},
    "oblique": {
        "ImageOrientationPatient": list(OBLIQUE),
        "positions": sw.along(5, 1.5 * np.cross(OBLIQUE[:3], OBLIQUE[3:])),
    },
    "feet first": {"ImageOrientationPatient": [-1, 0, 0, 0, 1, 0]},
    "leaning": {
        "ImageOrientationPatient": [1, 0, 0, 0, 0.966, 0.259],
        "positions": sw.along(5, (0, 0, 2)),
    },
    "uneven": {"positions": [(0, 0, z) for z in (0.0, 1.0, 5.0, 5.5, 20.0)]},
    "odd decimals": {"positions": [(-1 / 3, 2 / 3, k * 10 / 7) for k in range(5)]},
}


@pytest.mark.parametrize("encoding", ["binary", "labelmap"])
@pytest.mark.parametrize("kind", SERIES)
def test_labels_and_classes_come_back(tmp_path, kind, encoding):
    entry, labels = entry_of(tmp_path / "s", **SERIES[kind]), some_labels()
    file = write_segmentation(tmp_path / "seg", entry, labels, {7: LIVER}, encoding=encoding)
    for onto in (entry, read_series(entry)):
        back = read_segmentation(file, onto)
        assert back.labels.dtype == np.uint16
        assert np.array_equal(back.labels, labels)
        assert back.cautions == ()
        assert set(back.classes) == {1, 2, 7, 300}
        assert back.classes[7] == LIVER
        assert back.classes[1] == LabelClass("Label 1")


@pytest.mark.parametrize("seed", range(6))
def test_any_labels_come_back(tmp_path, seed):
    rng = np.random.default_rng(seed)
    numbers = tuple(int(n) for n in rng.integers(1, 65_536, 1 + 3 * seed))
    entry, labels = entry_of(tmp_path / "s"), some_labels(seed, numbers)
    if not labels.any():
        labels[0, 0, 0] = 65_535
    for encoding in ("binary", "labelmap"):
        file = write_segmentation(tmp_path / "seg", entry, labels, encoding=encoding)
        assert np.array_equal(read_segmentation(file, entry).labels, labels)


def test_frames_of_a_multi_frame_file_are_referred_to_by_their_own_numbers(tmp_path):
    shuffled = [3, 0, 4, 1, 2]
    ds = sw.enhanced(STORED, [sw.line(5)[k] for k in shuffled])
    sw.save(ds, tmp_path / "s" / "one")
    (entry,) = scan_series(tmp_path / "s")
    labels = some_labels()
    file = write_segmentation(tmp_path / "seg", entry, labels)
    assert np.array_equal(read_segmentation(file, entry).labels, labels)
    written = dcmread(file)
    for plane, group in zip(
        bits_of(written), written.PerFrameFunctionalGroupsSequence, strict=True
    ):
        source = group.DerivationImageSequence[0].SourceImageSequence[0]
        k = shuffled[int(source.ReferencedFrameNumber) - 1]
        segment = int(group.SegmentIdentificationSequence[0].ReferencedSegmentNumber)
        assert np.array_equal(plane, labels[k] == (1, 2, 7, 300)[segment - 1])


def foreign(folder: Path, pixels: Any, kind: str = "BINARY", **geometry: Any) -> Path:
    """Write a segmentation as another program might, with a geometry of its own."""
    sources = sources_of(folder)
    for source in sources:
        for name in ("PatientID", "PatientName", "PatientBirthDate", "PatientSex", "StudyID"):
            setattr(source, name, "")
        source.AccessionNumber, source.StudyDate, source.StudyTime = "", None, None
    count = pixels.shape[3] if pixels.ndim == 4 else max(1, int(pixels.max()))
    described = [
        SegmentDescription(k + 1, f"part {k + 1}", codes.SCT.Tissue, codes.SCT.Liver, "MANUAL")
        for k in range(count)
    ]
    ds = Segmentation(
        sources,
        pixels,
        kind,
        described,
        series_instance_uid=sw.uid("foreign"),
        series_number=9,
        sop_instance_uid=sw.uid("foreign", "one"),
        instance_number=1,
        manufacturer="none",
        manufacturer_model_name="none",
        software_versions="0",
        device_serial_number="0",
    )
    shared = ds.SharedFunctionalGroupsSequence[0]
    if "cosines" in geometry:
        shared.PlaneOrientationSequence[0].ImageOrientationPatient = list(geometry["cosines"])
    if "spacing" in geometry:
        shared.PixelMeasuresSequence[0].PixelSpacing = list(geometry["spacing"])
    for group in ds.PerFrameFunctionalGroupsSequence:
        place = group.PlanePositionSequence[0]
        moved = np.array(place.ImagePositionPatient, float) + geometry.get("moved", (0, 0, 0))
        place.ImagePositionPatient = [float(v) for v in moved]
    ds.save_as(folder / "foreign")
    return folder / "foreign"


#: 63 random pixels, none alike under any turn or mirror
TURNED = np.random.default_rng(5).integers(0, 2, SHAPE).astype(np.uint8)


@pytest.mark.parametrize(
    ("cosines", "moved", "expected"),
    [
        pytest.param((1, 0, 0, 0, 1, 0), (0, 0, 0), TURNED, id="same"),
        pytest.param((-1, 0, 0, 0, 1, 0), (4, 0, 0), TURNED[:, :, ::-1], id="mirrored"),
        pytest.param((1, 0, 0, 0, -1, 0), (0, 3, 0), TURNED[:, ::-1], id="upside down"),
        pytest.param((-1, 0, 0, 0, -1, 0), (4, 3, 0), TURNED[:, ::-1, ::-1], id="half a turn"),
    ],
)
def test_frames_of_another_orientation_are_turned(tmp_path, cosines, moved, expected):
    entry = entry_of(tmp_path / "s", PixelSpacing=[0.5, 0.5])
    file = foreign(tmp_path, TURNED, cosines=cosines, moved=moved)
    assert np.array_equal(read_segmentation(file, entry).labels, expected)


def test_frames_whose_rows_are_our_columns_are_swapped(tmp_path):
    entry = entry_of(tmp_path / "s")
    file = foreign(tmp_path, TURNED, cosines=(0, 1, 0, 1, 0, 0))
    expected = np.zeros(SHAPE, np.uint16)
    expected[:, :7, :7] = TURNED.transpose(0, 2, 1)[:, :7, :7]
    assert np.array_equal(read_segmentation(file, entry).labels, expected)


@pytest.mark.parametrize(("rows", "columns"), [(2, 3), (-2, -3), (2, -3), (-6, 8)])
def test_frames_that_reach_beyond_are_cropped(tmp_path, rows, columns):
    entry = entry_of(tmp_path / "s")
    file = foreign(tmp_path, TURNED, moved=(0.5 * columns, 0.5 * rows, 0))
    wide = np.zeros((5, 7 + 16, 9 + 16), np.uint16)
    wide[:, 8 + rows : 15 + rows, 8 + columns : 17 + columns] = TURNED
    assert np.array_equal(read_segmentation(file, entry).labels, wide[:, 8:15, 8:17])


def test_frames_wholly_outside_are_left_out_with_a_caution(tmp_path):
    entry = entry_of(tmp_path / "s")
    back = read_segmentation(foreign(tmp_path, TURNED, moved=(0, 0, 4)), entry)
    assert np.array_equal(back.labels[2:], TURNED[:3])
    assert not back.labels[:2].any()
    (caution,) = back.cautions
    assert (caution.code, caution.text[:2]) == ("segmentation-outside", "2 ")
    aside = read_segmentation(foreign(tmp_path, TURNED, moved=(0, 500, 0)), entry)
    assert not aside.labels.any()


@pytest.mark.parametrize(
    ("geometry", "reason"),
    [
        ({"moved": (0, 0, 1)}, "between the slices"),
        ({"moved": (0.25, 0, 0)}, "between the pixels"),
        ({"spacing": (0.5, 0.6)}, "another size or orientation"),
        ({"cosines": (0.8, 0.6, 0, -0.6, 0.8, 0)}, "another size or orientation"),
        ({"cosines": (1, 0, 0, 0, 0, 1)}, "another size or orientation"),
    ],
)
def test_another_grid_is_refused(tmp_path, geometry, reason):
    entry = entry_of(tmp_path / "s")
    with pytest.raises(SeriesError, match=reason):
        read_segmentation(foreign(tmp_path, TURNED, **geometry), entry)


def test_a_volume_without_a_patient_frame_is_refused(tmp_path):
    entry = entry_of(tmp_path / "s")
    file = write_segmentation(tmp_path / "seg", entry, some_labels())
    with pytest.raises(SeriesError, match="no place in a patient"):
        read_segmentation(file, Volume(np.zeros(SHAPE), spacing_mm=(2, 0.5, 0.5)))


def test_a_foreign_file_keeps_its_segment_numbers_names_and_codes(tmp_path):
    entry = entry_of(tmp_path / "s")
    pixels = some_labels(1, (1, 2, 3)).astype(np.uint8)
    back = read_segmentation(foreign(tmp_path, pixels), entry)
    assert np.array_equal(back.labels, pixels)
    assert back.classes[2].name == "part 2"
    assert back.classes[2].kind == Code("10200004", "SCT", "Liver")


def test_overlapping_segments_keep_the_higher_number_and_say_so(tmp_path):
    entry = entry_of(tmp_path / "s")
    pixels = np.zeros((*SHAPE, 2), np.uint8)
    pixels[1, 2:5, 2:5, 0] = pixels[1, 4:6, 4:6, 1] = 1
    back = read_segmentation(foreign(tmp_path, pixels), entry)
    assert back.labels[1, 4, 4] == 2
    assert np.count_nonzero(back.labels == 1) == 8
    (caution,) = back.cautions
    assert caution.text == "Segments share 1 voxels; the higher number was kept there."


def test_a_fractional_segment_holds_what_is_at_least_half(tmp_path):
    entry = entry_of(tmp_path / "s")
    pixels = np.linspace(0, 1, 315).reshape(SHAPE).astype(np.float32)
    back = read_segmentation(foreign(tmp_path, pixels, "FRACTIONAL"), entry)
    stored = np.rint(pixels * 255)
    assert np.array_equal(back.labels, stored >= 127.5)


@pytest.mark.parametrize(
    ("labels", "rule"),
    [
        (np.ones((5, 7, 8), int), "shape of the series"),
        (np.ones(SHAPE), "whole numbers"),
        (-np.ones(SHAPE, int), "between 0 and 65535"),
        (np.full(SHAPE, 65_536), "between 0 and 65535"),
        (np.zeros(SHAPE, int), "at least one voxel"),
    ],
    ids=["shape", "float", "negative", "too high", "empty"],
)
def test_labels_that_cannot_be_written_are_refused(tmp_path, labels, rule):
    entry = entry_of(tmp_path / "s")
    with pytest.raises(ArgumentError, match=rule):
        write_segmentation(tmp_path / "seg", entry, labels)
    assert not (tmp_path / "seg").exists()


@pytest.mark.parametrize("name", ["", "a\\b", "x" * 65, "two\nlines"])
def test_names_that_dicom_cannot_hold_are_refused(name):
    with pytest.raises(ArgumentError, match="printable"):
        LabelClass(name)


@pytest.mark.parametrize("lost", ["FrameOfReferenceUID", "StudyInstanceUID"])
def test_a_series_that_cannot_be_referred_to_is_refused(tmp_path, lost):
    entry = entry_of(tmp_path / "s", **{lost: None})
    with pytest.raises(SeriesError, match="source images lack"):
        write_segmentation(tmp_path / "seg", entry, some_labels())


def test_a_file_that_is_no_segmentation_is_refused(tmp_path):
    entry = entry_of(tmp_path / "s")
    (tmp_path / "text").write_text("not DICOM")
    for path in ((tmp_path / "s" / "0000"), tmp_path / "text", tmp_path / "nowhere"):
        with pytest.raises(SeriesError, match=r"not a DICOM|cannot be opened"):
            read_segmentation(path, entry)


def test_a_failed_write_leaves_no_file_and_keeps_the_old_one(tmp_path):
    entry = entry_of(tmp_path / "s")
    with pytest.raises(SeriesError, match="cannot be written: no such file or directory"):
        write_segmentation(tmp_path / "none" / "seg", entry, some_labels())
    file = write_segmentation(tmp_path / "seg", entry, some_labels())
    first = dcmread(file).SOPInstanceUID
    write_segmentation(file, entry, some_labels())
    assert dcmread(file).SOPInstanceUID != first
    assert {path.name for path in tmp_path.iterdir()} == {"s", "seg"}
