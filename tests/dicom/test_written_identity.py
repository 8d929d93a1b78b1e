"""A written object says whose images it belongs to, word for word; nothing else ever does."""

from __future__ import annotations

import pickle
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import series_writer as sw
from identities import IDENTITY, MARK, OTHERS
from mutations import mutated, sample_of
from pydicom import dcmread
from pydicom.config import disable_value_validation

from ct_measure_plugin.dicom import identity, scan_series, segmentation, source_images
from ct_measure_plugin.dicom.segmentation import read_segmentation, write_segmentation
from ct_measure_plugin.errors import SeriesError

SHAPE = (3, 8, 8)
STORED = sw.noise(SHAPE)
LABELS = (STORED > 500).astype(np.uint8)


def entry_of(folder: Path, **changes: Any) -> Any:
    with disable_value_validation():
        sw.write_series(folder, STORED, sw.line(3), **changes)
    (entry,) = scan_series(folder)
    return entry


def test_patient_and_study_are_repeated_and_nothing_else_is(tmp_path):
    entry = entry_of(tmp_path / "s", **IDENTITY, **OTHERS)
    ds = dcmread(write_segmentation(tmp_path / "seg", entry, LABELS))
    for name, value in IDENTITY.items():
        assert str(ds[name].value) == value
    for name in OTHERS:
        assert MARK not in str(ds.get(name, ""))
    raw = (tmp_path / "seg").read_bytes().decode("latin-1")
    assert raw.count(MARK) == sum(MARK in value for value in IDENTITY.values())


def test_an_anonymous_object_names_nobody(tmp_path):
    entry = entry_of(tmp_path / "s", **IDENTITY, **OTHERS)
    file = write_segmentation(tmp_path / "seg", entry, LABELS, anonymous=True)
    ds = dcmread(file)
    assert MARK not in file.read_bytes().decode("latin-1")
    for name in IDENTITY:
        assert not ds.get(name)
    assert ds.StudyInstanceUID == sw.uid("study")


def test_what_is_anonymous_is_not_even_read(tmp_path, monkeypatch):
    entry = entry_of(tmp_path / "s", **IDENTITY)
    wanted = []
    whole = identity.read_header

    def listening(path, tags):
        wanted.append(tags)
        return whole(path, tags)

    monkeypatch.setattr(identity, "read_header", listening)
    write_segmentation(tmp_path / "seg", entry, LABELS, anonymous=True)
    write_segmentation(tmp_path / "seg", entry, LABELS)
    without, with_identity = wanted
    assert not without & set(identity.IDENTITY)
    assert with_identity >= set(identity.IDENTITY)


CHARSETS = {
    "Latin 1": ("ISO_IR 100", "Müller^Jörg"),
    "UTF-8": ("ISO_IR 192", "山田^太郎"),
    "Cyrillic": ("ISO_IR 144", "Люкceмбypг"),
    "Japanese": (["", "ISO 2022 IR 87"], "Yamada^Tarou=山田^太郎=やまだ^たろう"),
    "Korean": (["", "ISO 2022 IR 149"], "Hong^Gildong=洪^吉洞=홍^길동"),
    "Chinese": ("GB18030", "Wang^XiaoDong=王^小东"),
}


@pytest.mark.parametrize("name", CHARSETS)
def test_names_are_repeated_in_any_character_set(tmp_path, name):
    charset, text = CHARSETS[name]
    entry = entry_of(tmp_path / "s", SpecificCharacterSet=charset, PatientName=text)
    ds = dcmread(write_segmentation(tmp_path / "seg", entry, LABELS))
    assert str(ds.PatientName) == text
    assert ds.SpecificCharacterSet == "ISO_IR 192"


ODD = {
    "PatientName": "x" * 500 + "\x1b[31m\\%s",
    "PatientID": "A" * 200,
    "PatientBirthDate": "the 3rd of May",
    "StudyTime": "noon",
    "PatientSex": "neither",
    "AccessionNumber": "1\\2\\3",
}


def test_odd_values_are_repeated_without_a_sound(tmp_path, caplog):
    """A complaint would quote them; the suite makes any warning an error."""
    entry = entry_of(tmp_path / "s", **ODD)
    file = write_segmentation(tmp_path / "seg", entry, LABELS)
    assert caplog.messages == []
    raw = file.read_bytes()
    for value in ("A" * 200, "the 3rd of May", "noon", "neither", "1\\2\\3"):
        assert value.encode() in raw


def test_labels_read_back_hold_nothing_of_the_patient(tmp_path):
    entry = entry_of(tmp_path / "s", **IDENTITY)
    back = read_segmentation(write_segmentation(tmp_path / "seg", entry, LABELS), entry)
    assert np.array_equal(back.labels, LABELS)
    for text in (repr(back), pickle.dumps(back).decode("latin-1")):
        assert MARK not in text
        assert sw.uid("study") not in text


def test_errors_hold_nothing_of_the_patient(tmp_path, monkeypatch):
    entry = entry_of(tmp_path / "s", **IDENTITY)

    def quoting(_: Any, facts: Any) -> None:
        raise ValueError(str(facts.identity))

    def failing(*_: Any) -> None:
        raise ValueError("cannot be made")

    monkeypatch.setattr(source_images, "give_identity", quoting)
    with pytest.raises(SeriesError) as caught:
        write_segmentation(tmp_path / "seg", entry, LABELS)
    assert MARK not in str(caught.value)
    assert caught.value.__cause__ is None
    assert caught.value.__suppress_context__
    monkeypatch.setattr(segmentation, "_object", failing)
    with pytest.raises(SeriesError, match="cannot be made from this series"):
        write_segmentation(tmp_path / "seg", entry, LABELS)
    assert [path.name for path in tmp_path.iterdir()] == ["s"]


def examine(file: Path, entry: Any) -> str:
    try:
        back = read_segmentation(file, entry)
    except SeriesError as problem:
        reason = str(problem)
    else:
        assert back.labels.shape == SHAPE
        assert MARK not in repr(back)
        return "read"
    assert reason.isprintable()
    assert MARK not in reason
    return "refused"


@pytest.mark.parametrize("encoding", ["binary", "labelmap"])
@pytest.mark.parametrize(
    "count", [pytest.param(200, id="some"), pytest.param(5000, id="many", marks=pytest.mark.long)]
)
def test_mutated_segmentations_are_read_or_refused_in_a_sentence(tmp_path, encoding, count):
    entry = entry_of(tmp_path / "s", **IDENTITY)
    sample = sample_of(
        write_segmentation(tmp_path / "seg", entry, LABELS, encoding=encoding).read_bytes()
    )
    rng = np.random.default_rng(11)
    file = tmp_path / "mutated"
    fates = []
    for _ in range(count):
        _, data = mutated(rng, sample)
        file.write_bytes(data)
        fates.append(examine(file, entry))
    assert min(fates.count("read"), fates.count("refused")) > count / 10
