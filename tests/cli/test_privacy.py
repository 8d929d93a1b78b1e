"""Nothing that identifies a patient comes out, whichever way it might.

A marked name stands in every attribute that could identify somebody, and in free text; then every
output is searched for the mark.
"""

from __future__ import annotations

import logging
import warnings

import pytest
from pydicom import dcmread
from pydicom.datadict import dictionary_VR
from series_writer import line, noise, save, write_series

from ct_measure_plugin.cli import main
from ct_measure_plugin.records import Logbook

MARK = "Zyxmarkq"

#: DICOM PS3.15, table E.1-1 (basic application level confidentiality profile): attributes with
#: names, numbers, places, dates of birth or free text about a person; a selection by hand.
IDENTIFYING = (
    "PatientName", "PatientID", "OtherPatientIDs", "OtherPatientNames", "PatientBirthName",
    "PatientMotherBirthName", "PatientAddress", "PatientTelephoneNumbers", "PatientComments",
    "PatientReligiousPreference", "EthnicGroup", "Occupation", "AdditionalPatientHistory",
    "MilitaryRank", "BranchOfService", "CountryOfResidence", "RegionOfResidence",
    "MedicalRecordLocator", "IssuerOfPatientID", "AccessionNumber", "StudyID", "AdmissionID",
    "InstitutionName", "InstitutionAddress", "InstitutionalDepartmentName", "StationName",
    "ReferringPhysicianName", "ReferringPhysicianAddress", "PerformingPhysicianName",
    "OperatorsName", "NameOfPhysiciansReadingStudy", "PhysiciansOfRecord",
    "RequestingPhysician", "RequestedProcedureDescription", "StudyDescription",
    "SeriesDescription", "ProtocolName", "ImageComments", "StudyComments", "DeviceSerialNumber",
    "PerformedProcedureStepDescription", "PerformedStationName", "ScheduledPerformingPhysicianName",
    "CurrentPatientLocation", "ContrastBolusAgent", "AcquisitionComments", "DerivationDescription",
)  # fmt: skip

WORDS = ["--region", "disc center=6,6 radius=4 name=water"]


@pytest.fixture
def folder(tmp_path):
    """A series whose folder is harmless and whose headers are full of the mark."""
    home = write_series(tmp_path / "ct", noise((3, 64, 64)), line(3))
    for file in home.iterdir():
        ds = dcmread(file)
        for keyword in IDENTIFYING:
            value = f"{MARK}^Anna" if dictionary_VR(keyword) == "PN" else f"{MARK} 4711"
            setattr(ds, keyword, value[:16] if dictionary_VR(keyword) in ("SH", "CS") else value)
        ds.PatientBirthDate = "19010203"
        block = ds.private_block(0x0029, f"{MARK} PRIVATE", create=True)
        block.add_new(0x10, "LO", f"{MARK} private")
        save(ds, file)
    return home


def test_the_mark_is_in_the_files(folder):
    """Canary: the search below would find it."""
    assert all(MARK.encode() in file.read_bytes() for file in folder.iterdir())


@pytest.mark.parametrize(
    "arguments",
    [
        ["series", "{folder}"],
        ["series", "{folder}", "--json"],
        ["measure", "{folder}", "region_statistics", *WORDS],
        ["measure", "{folder}", "region_statistics", *WORDS, "--json"],
        ["measure", "{folder}", "region_statistics", "--region", "disc center=900,9 radius=4"],
        ["measure", "{folder}", "region_statistics", "--region", "disc center=900,9 radius=-4"],
        ["measure", "{folder}", "region_statistics", *WORDS, "--index", "9"],
        ["measure", "{folder}", "region_statistics", *WORDS, "--csv", "{out}/a.csv",
         "--save", "{out}/a.json", "--report", "{out}/a.html", "--logbook", "{out}/a.sqlite"],
    ],
)  # fmt: skip
def test_no_output_shows_it(folder, tmp_path, capfd, caplog, arguments):
    out = tmp_path / "out"
    out.mkdir()
    with caplog.at_level(logging.DEBUG), warnings.catch_warnings(record=True) as seen:
        warnings.simplefilter("always")
        main([argument.format(folder=folder, out=out) for argument in arguments])
    texts = [*capfd.readouterr(), caplog.text, *(str(w.message) for w in seen)]
    assert not any(MARK in text for text in texts)
    assert not any("19010203" in text for text in texts)
    for file in out.iterdir():
        assert MARK.encode() not in file.read_bytes(), file.name
        assert b"19010203" not in file.read_bytes(), file.name
    if (out / "a.sqlite").exists():
        with Logbook(out / "a.sqlite") as book:
            assert not any(MARK in record.model_dump_json() for record in book.find())


def test_a_damaged_file_does_not_tell_either(folder, capfd):
    for i, file in enumerate(folder.iterdir()):
        data = file.read_bytes()
        file.write_bytes(data[: len(data) // 2] if i else data[:700] + b"\xff" * 50 + data[750:])
    main(["series", str(folder)])
    main(["measure", str(folder), "region_statistics", *WORDS])
    assert not any(MARK in text for text in capfd.readouterr())
