"""Nothing that identifies a patient leaves the room: a mark in every element that could hold it."""

from __future__ import annotations

import dataclasses
import pickle
import traceback
import warnings
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import series_writer as sw
from pydicom.datadict import DicomDictionary
from pydicom.dataelem import DataElement
from pydicom.dataset import Dataset
from pydicom.sequence import Sequence
from pydicom.uid import JPEGLSLossless, MRImageStorage

from ct_measure_plugin.dicom import read_series, scan_folder, syntaxes
from ct_measure_plugin.errors import CtMeasureError

MARK = "QUMRAKX"
#: a root of the DICOM library's own, then digits to be found again
MARKED_UID = "1.2.826.0.1.3680043.8.498.7749336225"
MARKED_DIGITS = "7749336225"
BIRTH_DATE = "19470317"
STORED = sw.noise((3, 32, 32)).view(np.uint16)
TEXT_VRS = {"AE", "CS", "LO", "LT", "PN", "SH", "ST", "UC", "UR", "UT"}
#: code words and technical text that make the file a CT image, or that the room gives by design
KEPT = {
    0x00080005,  # character set
    0x00080060,  # modality
    0x00280004,  # photometric interpretation
    0x00281056,  # VOI LUT function
    0x00282110,  # lossy compression
    0x00181210,  # convolution kernel
    0x00281055,  # window explanation
}


def marked(ds: Dataset) -> Dataset:
    """Plant the mark in every text, date and UID of the dictionary that the image can do without.

    It goes into private elements and into items of sequences too.
    """
    planted = 0
    for tag, (vr, *_) in DicomDictionary.items():
        group = tag >> 16
        if group in (0x0000, 0x0002, 0x0004) or tag in KEPT:
            continue
        if vr in TEXT_VRS:
            ds[tag] = element(tag, vr, f"{MARK}^ANN" if vr == "PN" else MARK)
        elif vr in ("DA", "DT"):
            ds[tag] = element(tag, vr, BIRTH_DATE)
        elif vr == "UI" and tag != 0x00080016:  # object class
            ds[tag] = element(tag, vr, ds[tag].value if tag in ds else MARKED_UID)
        else:
            continue
        planted += 1
    assert planted > 1500
    block = ds.private_block(0x0019, MARK, create=True)
    block.add_new(1, "LO", MARK)
    for name in ("ReferencedStudySequence", "OtherPatientIDsSequence", "RequestAttributesSequence"):
        item = Dataset()
        item.PatientID, item.PatientName = MARK, f"{MARK}^ANN"
        setattr(ds, name, Sequence([item]))
    return ds


def element(tag: int, vr: str, value: str) -> DataElement:
    return DataElement(tag, vr, value)


def image(k: int, series: str = "1", **changes: Any) -> Dataset:
    ds = sw.ct_slice(STORED[k], position=(0, 0, 2.0 * k), BitsStored=12, HighBit=11, **changes)
    kind = ds.ImageType
    ds.SOPInstanceUID = f"{MARKED_UID}.{series}.{k}"
    ds.SeriesInstanceUID = ds.FrameOfReferenceUID = f"{MARKED_UID}.{series}"
    marked(ds)
    ds.ImageType = kind
    return ds


def traces(text: str) -> list[str]:
    return [mark for mark in (MARK, MARKED_DIGITS, BIRTH_DATE) if mark.lower() in text.lower()]


def public_texts(thing: Any, depth: int = 0) -> Iterator[str]:
    """Yield every text that can be reached by public names."""
    assert depth < 8
    if isinstance(thing, str | Path):
        yield str(thing)
    elif isinstance(thing, dict):
        for key, value in thing.items():
            yield from public_texts(key, depth + 1)
            yield from public_texts(value, depth + 1)
    elif isinstance(thing, tuple | list | set | frozenset):
        for value in thing:
            yield from public_texts(value, depth + 1)
    elif dataclasses.is_dataclass(thing):
        yield repr(thing)
        for name in dir(thing):
            value = None if name.startswith("_") else getattr(thing, name)
            if not callable(value):
                yield from public_texts(value, depth + 1)


@pytest.fixture
def heard(caplog):
    """Fail if anything that is logged or warned of holds a mark."""
    caplog.set_level("DEBUG")
    with warnings.catch_warnings(record=True) as warned:
        warnings.simplefilter("always")
        yield
    for line in [*caplog.messages, *(str(warning.message) for warning in warned)]:
        assert traces(line) == []


@pytest.mark.parametrize("kind", ["classic", "compressed", "enhanced", "implicit", "bare"])
def test_what_is_returned_holds_no_mark(tmp_path, heard, kind):
    if kind == "enhanced":
        ds = sw.enhanced(STORED, sw.line(3))
        kept = ds.ImageType
        ds.SeriesInstanceUID = MARKED_UID
        marked(ds).ImageType = kept
        sw.save(ds, tmp_path / "one")
    for k in range(3 if kind != "enhanced" else 0):
        file = tmp_path / str(k)
        if kind == "bare":
            sw.bare_bytes(image(k), file, implicit=True)
        elif kind == "compressed":
            sw.save_compressed(image(k), file, JPEGLSLossless)
        else:
            sw.save(image(k), file, sw.NATIVE["implicit" if kind == "implicit" else "explicit"])
    scan = scan_folder(tmp_path)
    (entry,) = scan
    assert entry.description == MARK  # for the person at the screen, by design; so it was planted
    found = [text for text in public_texts(scan) if traces(text)]
    assert set(found) == {MARK}
    assert len(found) == 1
    assert traces(repr(scan) + str(entry) + entry.label + entry.key) == []
    for lazy in (False, True):
        volume = read_series(entry, lazy=lazy)
        assert volume.shape == (3, 32, 32)
        assert [text for text in public_texts(volume) if traces(text)] == []
        assert traces(repr(volume)) == []
    packed = pickle.dumps(read_series(entry, lazy=False)).decode("latin-1")
    assert traces(packed) == []


def fail(folder: Path, how: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """Bring about one kind of error on marked files."""
    if how == "several series":
        for series in "12":
            sw.save(image(0, series), folder / series)
        read_series(folder)
    if how == "no such series":
        sw.save(image(0), folder / "one")
        read_series(folder, f"{MARKED_UID}.9")
    if how == "another kind":
        ds = image(0)
        ds.SOPClassUID = MRImageStorage
        sw.save(ds, folder / "one")
        read_series(folder)
    if how == "private kind":
        ds = image(0)
        ds.SOPClassUID = MARKED_UID
        sw.save(ds, folder / "one")
        read_series(folder)
    if how == "cut short":
        file = sw.save(image(0), folder / "one")
        file.write_bytes(file.read_bytes()[:-50])
        read_series(folder)
    file = sw.save_compressed(image(0), folder / "one", JPEGLSLossless)
    if how == "damaged stream":
        raw = bytearray(file.read_bytes())
        at = raw.index(b"\xff\xda") + 12
        raw[at : at + 40] = bytes(40)
        file.write_bytes(raw)
    if how == "no decoder":
        monkeypatch.setattr(syntaxes, "_importable", lambda _: False)
    read_series(folder)


@pytest.mark.parametrize(
    "how",
    [
        "several series",
        "no such series",
        "another kind",
        "private kind",
        "cut short",
        "damaged stream",
        "no decoder",
    ],
)
def test_errors_hold_no_mark(tmp_path, heard, monkeypatch, how):
    with pytest.raises(CtMeasureError) as caught:
        fail(tmp_path, how, monkeypatch)
    error = caught.value
    assert traces(str(error) + repr(error)) == []
    chain = [error, error.__cause__, error.__context__]
    for link in chain:
        if link is not None:
            assert traces("".join(traceback.format_exception_only(link))) == []


def test_reasons_hold_no_mark(tmp_path, heard):
    for k, (name, value) in enumerate(
        [
            ("Rows", None),
            ("PixelSpacing", None),
            ("SOPClassUID", MARKED_UID),
            ("RescaleSlope", 1e99),
        ]
    ):
        ds = image(0)
        if value is None:
            delattr(ds, name)
        else:
            setattr(ds, name, value)
        sw.save(ds, tmp_path / str(k))
    scan = scan_folder(tmp_path)
    assert len(scan.skipped) == 4
    assert [text for text in public_texts(scan) if traces(text)] == []


def test_a_leak_is_red(tmp_path):
    sw.save(image(0), tmp_path / "one")
    (entry,) = scan_folder(tmp_path)
    leaking = dataclasses.replace(entry, kernel=f"for {MARK}")
    assert [text for text in public_texts(leaking) if traces(text)] != [MARK]
    assert traces(pickle.dumps(entry).decode("latin-1")) != []  # what the room keeps to itself
