"""Scanning never stumbles: series are listed, everything else is passed over with its reason."""

from __future__ import annotations

import gc
import os
import threading
import warnings

import numpy as np
import pytest
import series_writer as sw
from pydicom.config import disable_value_validation
from pydicom.fileset import FileSet
from pydicom.uid import (
    BasicTextSRStorage,
    MRImageStorage,
    PositronEmissionTomographyImageStorage,
    SecondaryCaptureImageStorage,
    generate_uid,
)

from ct_measure_plugin.dicom import read_series, scan_folder, scan_series
from ct_measure_plugin.errors import Cancelled, NoSeriesError, SeriesError

STORED = sw.noise((3, 8, 8))


def reasons(scan):
    return {item.path.name: item.reason for item in scan.skipped}


def test_a_mixed_folder_gives_the_series_and_a_reason_for_all_else(tmp_path):
    sw.write_series(tmp_path / "deep" / "er", STORED, sw.line(3))
    others = {
        "mr": {"SOPClassUID": MRImageStorage, "Modality": "MR"},
        "pet": {"SOPClassUID": PositronEmissionTomographyImageStorage, "Modality": "PT"},
        "dose page": {"SOPClassUID": SecondaryCaptureImageStorage},
        "localiser": {"ImageType": ["ORIGINAL", "PRIMARY", "LOCALIZER"]},
        "report": {"SOPClassUID": BasicTextSRStorage, "Modality": "SR", "PixelData": None},
        "private": {"SOPClassUID": generate_uid()},
        "no spacing": {"PixelSpacing": None},
        "no rows": {"Rows": None},
        "no pixels": {"PixelData": None},
        "twelve bits in twelve": {"BitsAllocated": 12, "BitsStored": 12},
        "colour": {"SamplesPerPixel": 3, "PhotometricInterpretation": "RGB"},
        "huge": {"Rows": 65535, "Columns": 65535},
        "larger than its file": {"Rows": 4096, "Columns": 4096},
    }
    for name, changes in others.items():
        sw.save(sw.ct_slice(STORED[0], **changes), tmp_path / name)
    (tmp_path / "notes.txt").write_text("not an image")
    (tmp_path / "empty").touch()
    (tmp_path / "zeros").write_bytes(bytes(5000))
    whole = (tmp_path / "mr").read_bytes()
    (tmp_path / "head only").write_bytes(whole[:140])
    scan = scan_folder(tmp_path)
    assert [entry.slice_count for entry in scan] == [3]
    assert len(scan) == 1
    assert reasons(scan) == {
        "mr": "MR Image Storage: not a CT image",
        "pet": "Positron Emission Tomography Image Storage: not a CT image",
        "dose page": "Secondary Capture Image Storage: not a CT image",
        "localiser": "a localiser, not a slice",
        "report": "Basic Text SR Storage: not a CT image",
        "private": "an object of another kind: not a CT image",
        "no spacing": "the pixel spacing is missing, so nothing is known in mm",
        "no rows": "rows or columns are missing",
        "no pixels": "no pixel data",
        "twelve bits in twelve": "bits allocated and stored are missing or impossible",
        "colour": "a colour picture, not a CT image",
        "huge": "65535 × 65535 pixels are more than a CT image can have",
        "larger than its file": "the pixel data are cut short: 128 of 33554432 bytes",
        "notes.txt": "not a DICOM file",
        "empty": "the file is empty",
        "zeros": "not a DICOM file",
        "head only": "the file is cut short inside its header",
    }
    assert sum(scan.reasons().values()) == len(scan.skipped)
    # the damaged ones say which series they are of
    caution = next(c for c in scan.entries[0].cautions if c.code == "unreadable-files")
    assert caution.text == "6 files of the series could not be read."


def test_a_damaged_file_leaves_the_others_of_its_series(tmp_path):
    sw.write_series(tmp_path, STORED, sw.line(3))
    file = sorted(tmp_path.iterdir())[1]
    file.write_bytes(file.read_bytes()[:-7])
    (entry,) = scan_series(tmp_path)
    assert entry.slice_count == 2
    assert {c.code for c in entry.cautions} >= {"unreadable-files"}


def test_a_file_cut_inside_its_header_still_counts_for_its_series(tmp_path):
    sw.write_series(tmp_path, STORED, sw.line(3))
    file = sorted(tmp_path.iterdir())[0]
    raw = file.read_bytes()
    file.write_bytes(raw[: raw.index(b"\x28\x00\x10\x00")])  # up to Rows
    (entry,) = scan_series(tmp_path)
    assert "unreadable-files" in {c.code for c in entry.cautions}


@pytest.mark.parametrize("implicit", [True, False])
def test_files_without_preamble_and_meta_are_read(tmp_path, implicit):
    for k in range(3):
        ds = sw.ct_slice(STORED[k], position=(0, 0, 2 * k))
        sw.bare_bytes(ds, tmp_path / str(k), implicit=implicit)
    volume = read_series(tmp_path)
    assert np.array_equal(volume.hu, STORED - 1024)
    assert {c.code for c in volume.cautions} == {"headerless-file"}


def test_a_file_with_meta_but_no_preamble_is_read(tmp_path):
    file = sw.save(sw.ct_slice(STORED[0]), tmp_path / "one")
    file.write_bytes(file.read_bytes()[132:])
    volume = read_series(tmp_path)
    assert np.array_equal(volume.hu[0], STORED[0] - 1024)
    assert {c.code for c in volume.cautions} == {"headerless-file"}


def test_a_wrongly_declared_encoding_gives_way_to_the_bytes(tmp_path):
    """Explicit is declared, implicit is written, and the other way round."""
    for declared, written in ((b"1.2.840.10008.1.2\0", False), (b"1.2.840.10008.1.2.1\0", True)):
        file = sw.save(sw.ct_slice(STORED[0]), tmp_path / "one", sw.NATIVE["explicit"])
        body = sw.bare_bytes(sw.ct_slice(STORED[0]), tmp_path / "bare", implicit=written)
        meta = b"\x02\x00\x10\x00UI" + len(declared).to_bytes(2, "little") + declared
        file.write_bytes(bytes(128) + b"DICM" + meta + body.read_bytes())
        (tmp_path / "bare").unlink()
        assert np.array_equal(read_series(tmp_path).hu[0], STORED[0] - 1024)


def test_text_that_starts_like_a_group_is_no_file(tmp_path):
    (tmp_path / "a").write_bytes(b"\x08\x00" + bytes(range(256)) * 8)
    (tmp_path / "b").write_bytes(b"\x00\x08" + bytes(range(256)) * 8)
    assert set(scan_folder(tmp_path).reasons()) == {"not a DICOM file"}


def test_a_single_file_stands_for_its_series(tmp_path):
    sw.write_series(tmp_path, STORED, sw.line(3))
    other = sw.ct_slice(STORED[0], SeriesInstanceUID=sw.uid("other"))
    sw.save(other, tmp_path / "other")
    file = next(path for path in tmp_path.iterdir() if path.name != "other")
    assert [entry.slice_count for entry in scan_series(file)] == [3]
    assert read_series(file).shape == (3, 8, 8)
    assert read_series(tmp_path / "other").shape == (1, 8, 8)


def test_a_single_file_of_another_kind_is_answered_with_its_reason(tmp_path):
    file = sw.save(sw.ct_slice(STORED[0], SOPClassUID=MRImageStorage), tmp_path / "mr")
    assert scan_series(file) == ()
    with pytest.raises(NoSeriesError, match="MR Image Storage: not a CT image"):
        read_series(file)


def test_a_folder_that_is_not_there_is_an_error(tmp_path):
    with pytest.raises(SeriesError, match="no such folder or file"):
        scan_series(tmp_path / "nowhere")


def test_an_empty_folder_holds_no_series(tmp_path):
    assert scan_series(tmp_path) == ()
    with pytest.raises(NoSeriesError, match="there are no files"):
        read_series(tmp_path)


def file_set(tmp_path):
    """Write a file set with its DICOMDIR; return the DICOMDIR."""
    with warnings.catch_warnings():
        # the library leaves its temporary folders to the garbage collector, which says so
        warnings.simplefilter("ignore", ResourceWarning)
        directory = write_file_set(tmp_path)
        gc.collect()
    return directory


def write_file_set(tmp_path):
    files = FileSet()
    for k in range(3):
        ds = sw.ct_slice(STORED[k], position=(0, 0, 2 * k), InstanceNumber=k + 1)
        ds.PatientID, ds.PatientName, ds.StudyID = "1", "A", "1"
        ds.StudyDate, ds.StudyTime, ds.AccessionNumber = "20200101", "120000", "1"
        files.add(sw.save(ds, tmp_path / "loose" / str(k)))
    files.write(tmp_path / "medium")
    return tmp_path / "medium" / "DICOMDIR"


def test_a_directory_file_leads_to_its_files(tmp_path):
    directory = file_set(tmp_path)
    assert np.array_equal(read_series(directory).hu, STORED - 1024)
    scan = scan_folder(directory.parent)
    assert [entry.slice_count for entry in scan] == [3]
    assert reasons(scan) == {"DICOMDIR": "a directory of other files"}


def test_a_directory_file_tells_of_files_that_are_gone(tmp_path):
    directory = file_set(tmp_path)
    gone = next(p for p in directory.parent.rglob("*") if p.is_file() and p != directory)
    gone.unlink()
    scan = scan_folder(directory)
    assert [entry.slice_count for entry in scan] == [2]
    assert reasons(scan) == {gone.name: "not a plain file, or it is gone"}


@pytest.mark.parametrize("name", ["../../loose", "..", "/etc", "C:"])
def test_a_directory_file_leads_nowhere_but_below_itself(tmp_path, name):
    from pydicom import dcmread

    directory = file_set(tmp_path)
    ds = dcmread(directory)
    with disable_value_validation():
        for record in ds.DirectoryRecordSequence:
            if "ReferencedFileID" in record:
                record.ReferencedFileID = [name, "0"]
        ds.save_as(directory)
    scan = scan_folder(directory)
    assert scan.entries == ()
    assert scan.skipped == ()


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="pipes are a thing of POSIX systems")
def test_a_pipe_does_not_hold_up_the_scan(tmp_path):
    os.mkfifo(tmp_path / "pipe")
    sw.write_series(tmp_path / "a", STORED, sw.line(3))
    scan = scan_folder(tmp_path)
    assert len(scan) == 1
    assert reasons(scan) == {"pipe": "not a plain file, or it is gone"}


def test_links_that_lead_round_do_not_trap_the_scan(tmp_path):
    sw.write_series(tmp_path / "a", STORED, sw.line(3))
    (tmp_path / "a" / "round").symlink_to(tmp_path, target_is_directory=True)
    assert len(scan_folder(tmp_path)) == 1


def test_progress_runs_through_files_and_then_slices(tmp_path):
    sw.write_series(tmp_path, sw.noise((20, 8, 8)), sw.line(20))
    told: list[tuple[int, int]] = []
    read_series(tmp_path, progress=lambda done, total: told.append((done, total)))
    assert told[0] == (0, 20)
    assert told.count((20, 20)) == 2
    assert all(done <= total == 20 for done, total in told)


@pytest.mark.parametrize("after", [0, 1, 2, 3])
def test_work_stops_when_asked(tmp_path, after):
    sw.write_series(tmp_path, sw.noise((20, 8, 8)), sw.line(20))
    asked = iter(range(100))
    with pytest.raises(Cancelled):
        read_series(tmp_path, cancel=lambda: next(asked) >= after)


def test_an_event_stops_work_too(tmp_path):
    sw.write_series(tmp_path, STORED, sw.line(3))
    event = threading.Event()
    assert len(scan_series(tmp_path, cancel=event)) == 1
    event.set()
    with pytest.raises(Cancelled):
        scan_series(tmp_path, cancel=event)
    (entry,) = scan_series(tmp_path)
    with pytest.raises(Cancelled):
        read_series(entry, cancel=event)


def test_entries_tell_what_a_person_chooses_by(tmp_path):
    sw.write_series(tmp_path, STORED, sw.line(3), Exposure=lambda k: str(100 + k), CTDIvol=5.0)
    (entry,) = scan_series(tmp_path)
    assert entry.description == "water phantom"
    assert (entry.kernel, entry.kvp, entry.mas) == ("K40", 120, (100, 102))
    assert (entry.ctdi_vol_mgy, entry.thickness_mm) == ((5, 5), (2, 2))
    assert (entry.slice_count, entry.matrix, entry.spacing_mm) == (3, (8, 8), (2, 0.5, 0.5))
    assert entry.label == "3 slices of 8 × 8, 2 mm, kernel K40, 120 kV"
    assert "water" not in repr(entry)


@pytest.mark.parametrize(
    ("charset", "text"),
    [("ISO_IR 100", "Köln"), ("ISO_IR 192", "水"), ("ISO_IR 144", "Вода"), ("GB18030", "水模")],
)
def test_descriptions_are_read_in_their_character_set(tmp_path, charset, text):
    sw.save(
        sw.ct_slice(STORED[0], SpecificCharacterSet=charset, SeriesDescription=text),
        tmp_path / "one",
    )
    assert scan_series(tmp_path)[0].description == text
