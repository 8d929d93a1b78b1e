"""`--dicom`: the shell's numbers in a DICOM file, read back by another reader."""

from __future__ import annotations

import json

import pytest
from pydicom import dcmread
from series_writer import line, noise, write_series

from ct_measure_plugin.cli import BAD_INPUT, DONE, main

DISC = "disc center=8,8 radius=6 z=2 name=water"


@pytest.fixture
def folder(tmp_path):
    return write_series(tmp_path / "ct", noise((4, 64, 64)), line(4), PatientName="Marked^Name")


def numbers(item):
    """Yield every number of a content tree."""
    if item.get("ValueType") == "NUM":
        yield float(item.MeasuredValueSequence[0].NumericValue)
    for child in item.get("ContentSequence", ()):
        yield from numbers(child)


def written(capsys, folder, *more):
    file = folder.parent / "report.dcm"
    words = ["measure", str(folder), "region_statistics", "--region", DISC, "--json"]
    code = main([*words, "--dicom", str(file), *more])
    out, err = capsys.readouterr()
    assert (code, err) == (DONE, "")
    return dcmread(file), json.loads(out)[0]["result"]


def test_the_file_holds_the_number_that_was_printed(capsys, folder):
    report, result = written(capsys, folder)
    assert report.Modality == "SR"
    found = list(numbers(report))
    for name in ("mean", "sd", "area", "kurtosis"):
        wanted = pytest.approx(result[name]["value"], rel=1e-9)  # a decimal string has 16 places
        assert any(value == wanted for value in found), name
    assert str(report.PatientName) == "Marked^Name"


def test_an_anonymous_file_names_nobody(capsys, folder):
    report, _ = written(capsys, folder, "--anonymous")
    assert str(report.PatientName) == ""
    assert "Marked" not in str(report)


def test_one_series_at_a_time(capsys, folder):
    words = ["measure", str(folder), "region_statistics", "--region", DISC]
    code = main([*words, "--against", str(folder), "--dicom", str(folder.parent / "no.dcm")])
    assert code == BAD_INPUT
    assert "--against" in capsys.readouterr().err
