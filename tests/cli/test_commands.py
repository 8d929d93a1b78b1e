"""The command line: exit codes, one sentence for bad input, and the same numbers as Python."""

from __future__ import annotations

import json
import subprocess
import sys

import numpy as np
import pytest
from series_writer import line, noise, save, write_series

import ct_measure_plugin as ctm
from ct_measure_plugin.cli import BAD_INPUT, DONE, NOT_MEASURABLE, TOLERANCE_FAILED, main
from ct_measure_plugin.measurements import compare, find
from ct_measure_plugin.records import write_regions

WATER = "disc center=6,6 radius=4 slice=1 name=water"


@pytest.fixture
def folder(tmp_path):
    return write_series(tmp_path / "ct", noise((4, 64, 64)), line(4))


def run(capsys, *arguments) -> tuple[int, str, str]:
    code = main([str(argument) for argument in arguments])
    out, err = capsys.readouterr()
    return code, out, err


def test_series_lists_what_is_there(capsys, folder):
    code, out, err = run(capsys, "series", folder)
    assert (code, err) == (DONE, "")
    assert "4 slices of 64 × 64" in out
    code, out, _ = run(capsys, "series", folder, "--json")
    assert json.loads(out)["series"][0]["slices"] == 4


def test_series_of_one_kernel_are_told_apart_by_dose_and_folder(capsys, tmp_path):
    """Two scans with the same kernel differ in what the listing says of them."""
    for name, exposure in (("low", "20"), ("high", "80")):
        write_series(
            tmp_path / name,
            noise((2, 32, 32)),
            line(2),
            Exposure=exposure,
            SeriesInstanceUID=f"1.2.{exposure}",
        )
    _, out, _ = run(capsys, "series", tmp_path)
    listed = [text for text in out.splitlines() if "2 slices" in text]
    assert len(listed) == 2
    assert any(text.endswith("20 mAs, in low") for text in listed)
    assert any(text.endswith("80 mAs, in high") for text in listed)


@pytest.mark.parametrize("way", ["file", "inside"])
def test_a_series_given_by_a_file_is_placed_too(capsys, folder, way, monkeypatch):
    target = sorted(folder.iterdir())[0]
    if way == "inside":
        monkeypatch.chdir(folder)
        target = target.name
    _, out, _ = run(capsys, "series", target)
    assert out.splitlines()[0].endswith("in .")


def test_measure_prints_the_number_that_python_gives(capsys, folder):
    code, out, _ = run(capsys, "measure", folder, "region_statistics", "--region", WATER, "--json")
    assert code == DONE
    [record] = json.loads(out)
    volume = ctm.read_series(folder)
    z = float(volume.positions_mm[1])
    found = ctm.measure("region_statistics", volume, ctm.regions.Disc((6, 6), 4, z_mm=z))
    assert record["result"]["mean"]["value"] == found.mean.value
    assert record["result"]["mean"]["uncertainty"] == found.mean.uncertainty
    assert record["regions"][0]["name"] == "water"


def test_settings_are_taken_by_name(capsys, folder):
    code, out, _ = run(
        capsys, "measure", folder, "region_statistics", "--region", WATER,
        "--set", "coverage=center", "--json",
    )  # fmt: skip
    assert code == DONE
    assert json.loads(out)[0]["settings"]["coverage"] == "center"


def test_a_file_of_regions_is_measured_like_words(capsys, folder, tmp_path):
    volume = ctm.read_series(folder)
    disc = ctm.regions.Disc((6, 6), 4, z_mm=float(volume.positions_mm[1]), name="water")
    file = write_regions([disc], tmp_path / "a.regions.json", volume=volume)
    _, words, _ = run(capsys, "measure", folder, "region_statistics", "--region", WATER)
    code, kept, _ = run(capsys, "measure", folder, "region_statistics", "--regions", file)
    assert code == DONE
    assert kept == words
    write_regions([disc], file)
    code, _, err = run(capsys, "measure", folder, "region_statistics", "--regions", file)
    assert code == BAD_INPUT
    assert "the regions lie in the frame of a plain array" in err


def test_a_label_file_is_measured_as_a_table_or_label_by_label(capsys, folder, tmp_path):
    volume = ctm.read_series(folder)
    labels = np.zeros(volume.shape, np.uint8)
    labels[1, 10:30, 10:30], labels[2:, 5:25, 40:60] = 1, 4
    np.save(tmp_path / "a.npy", labels)
    asked = ("--labels", tmp_path / "a.npy")
    code, out, err = run(capsys, "measure", folder, "label_statistics", *asked)
    assert (code, err) == (DONE, "")
    own = volume.hu[labels == 4]
    assert f"{own.size}" in out
    code, out, _ = run(capsys, "measure", folder, "region_statistics", *asked, "--json")
    assert code == DONE
    found = json.loads(out)
    assert [record["regions"][0]["name"] for record in found] == ["label 1", "label 4"]
    assert found[1]["result"]["mean"]["value"] == pytest.approx(own.mean(), rel=1e-12)
    table = tmp_path / "a.csv"
    run(capsys, "measure", folder, "label_statistics", *asked, "--csv", table)
    assert "labels.mean" in table.read_text(encoding="utf-8-sig")
    np.save(tmp_path / "a.npy", labels[:2])
    code, _, err = run(capsys, "measure", folder, "label_statistics", *asked)
    assert code == BAD_INPUT
    assert "a.npy has 2 × 64 × 64 voxels and the volume 4 × 64 × 64" in err


def test_two_series_are_one_table_with_their_differences(capsys, folder, tmp_path):
    values = noise((4, 64, 64), seed=9)
    other = write_series(tmp_path / "later", values + 25, line(4))
    asked = ("measure", folder, "region_statistics", "--region", WATER, "--against", other)
    code, out, err = run(capsys, *asked, "--changes", tmp_path / "a.csv")
    assert (code, err) == (DONE, "")
    mean = next(text for text in out.splitlines() if text.strip().startswith("Mean "))
    disc = ctm.regions.Disc((6, 6), 4, z_mm=float(ctm.read_series(folder).positions_mm[1]))
    [found] = compare("region_statistics", ctm.read_series(folder), ctm.read_series(other), disc)
    assert str(found.first.mean) in mean
    assert str(found.second.mean) in mean
    assert f"{found.differences['mean']} (paired)" in mean
    rows = (tmp_path / "a.csv").read_text(encoding="utf-8-sig").splitlines()
    assert rows[0].startswith("measurement,region,quantity,first,second,difference")
    assert rows[1].startswith("region_statistics,water,mean,")
    _, out, _ = run(capsys, *asked, "--json")
    data = json.loads(out)
    assert len(data["records"]) == 2
    assert float(data["changes"][0]["difference"]) == found.differences["mean"].value
    code, out, err = run(capsys, *asked[:-3], "disc center=900,6 radius=4", "--against", other)
    assert code == NOT_MEASURABLE
    assert "first: Not measured: the region lies outside" in out


def test_every_output_is_written(capsys, folder, tmp_path):
    names = ["t.csv", "r.json", "p.html", "b.sqlite"]
    csv, saved, page, book = (tmp_path / name for name in names)
    code, out, _ = run(
        capsys, "measure", folder, "region_statistics", "--region", WATER,
        "--csv", csv, "--save", saved, "--report", page, "--logbook", book,
    )  # fmt: skip
    assert code == DONE
    assert "HU" in out
    assert all(file.stat().st_size > 500 for file in (csv, saved, page, book))
    code, out, _ = run(capsys, "logbook", "--place", book)
    assert (code, "water" in out) == (DONE, True)
    code, out, _ = run(capsys, "report", saved, tmp_path / "again.html", "--title", "Again")
    assert code == DONE
    assert "<h1>Again</h1>" in (tmp_path / "again.html").read_text(encoding="utf-8")


PLAN = """
steps:
  - measurement: region_statistics
    regions: [{{kind: disc, center_mm: [6, 6], radius_mm: 4, name: water}}]
    tolerances: [{{quantity: mean, low: {low}, high: {high}}}]
"""


@pytest.mark.parametrize(
    ("low", "high", "code", "word"),
    [(-10, 10, DONE, "pass"), (500, 600, TOLERANCE_FAILED, "fail")],
)
def test_a_plan_is_judged(capsys, folder, tmp_path, low, high, code, word):
    (tmp_path / "plan.yaml").write_text(PLAN.format(low=low, high=high))
    found, out, _ = run(capsys, "measure", folder, "--plan", tmp_path / "plan.yaml")
    assert found == code
    assert f"{word}: water, mean" in out


def test_what_cannot_be_measured_says_why(capsys, folder):
    code, _, err = run(
        capsys,
        "measure",
        folder,
        "region_statistics",
        "--region",
        "disc center=6,6 radius=.3 slice=1",
    )
    assert code == NOT_MEASURABLE
    assert "at least 9 are needed" in err
    code, _, err = run(
        capsys, "measure", folder, "region_statistics", "--region", "disc center=900,900 radius=3"
    )
    assert code == NOT_MEASURABLE
    assert "the region lies outside the volume" in err
    assert "Remedy: move it onto the image" in err


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        (["series", "no such folder"], "there is no folder or file 'no such folder'"),
        (["measure", "gone", "uniformity"], "there is no folder or file 'gone'"),
        (["measure", "{folder}"], "'measurement' must be given"),
        (["measure", "{folder}", "edge", "--region", WATER], "no measurement is called 'edge'"),
        (["measure", "{folder}", "region_statistics"], "'region' must be given for"),
        (["measure", "{folder}", "region_statistics", "--region", "blob"], "'kind' must be one of"),
        (["measure", "{folder}", "region_statistics", "--region", "disc center=1 radius=2"],
         "'center' must be two numbers y,x"),
        (["measure", "{folder}", "region_statistics", "--region", "disc center=1,1 radius=two"],
         "'radius' must be a number"),
        (["measure", "{folder}", "region_statistics", "--region",
          "disc center=1,1 radius=2 slice=4"],
         "'slice' must lie within 0 to 3"),
        (["measure", "{folder}", "region_statistics", "--region", WATER, "--set", "coverage=half"],
         "'coverage' must be valid"),
        (["measure", "{folder}", "region_statistics", "--region", WATER, "--set", "colour=red"],
         "no setting of region_statistics is called 'colour'"),
        (["measure", "{folder}", "--plan", "gone.yaml"], "gone.yaml: cannot be read"),
        (["measure", "{folder}", "region_statistics", "--region", WATER, "--index", "5"],
         "there are 1 series"),
        (["report", "gone.json", "page.html"], "gone.json cannot be read"),
        (["measure", "{folder}", "region_statistics", "--region", WATER, "--csv", "no/dir/t.csv"],
         "No such file or directory"),
    ],
)  # fmt: skip
def test_bad_input_gets_one_sentence_and_its_code(capsys, folder, arguments, sentence):
    code, _, err = run(capsys, *(argument.format(folder=folder) for argument in arguments))
    assert code == BAD_INPUT
    assert sentence in err
    assert err.startswith("ct-measure: ")
    assert len(err.strip().splitlines()) == 1


def test_a_file_that_is_no_dicom_is_bad_input(capsys, tmp_path):
    (tmp_path / "junk").write_bytes(b"junk" * 1000)
    code, _, err = run(capsys, "measure", tmp_path, "region_statistics", "--region", WATER)
    assert code == BAD_INPUT
    assert len(err.strip().splitlines()) == 1


def test_two_series_ask_which_one(capsys, tmp_path):
    write_series(tmp_path / "a", noise((3, 32, 32)), line(3))
    from pydicom import dcmread

    for file in sorted((tmp_path / "a").iterdir()):
        ds = dcmread(file)
        ds.SeriesInstanceUID = "1.2.3.4"
        ds.SOPInstanceUID = f"{ds.SOPInstanceUID}.1"[:64]
        save(ds, tmp_path / "b" / file.name)
    words = "disc center=0,0 radius=3"
    code, _, err = run(capsys, "measure", tmp_path, "region_statistics", "--region", words)
    assert code == BAD_INPUT
    assert "--index" in err
    _, out, _ = run(capsys, "series", tmp_path, "--json")
    digest = json.loads(out)["series"][1]["digest"]
    asked = ("measure", tmp_path, "region_statistics", "--region", words, "--json", "--index")
    for which in (1, digest, digest[:12]):
        code, out, err = run(capsys, *asked, which)
        assert (code, err) == (DONE, "")
        assert json.loads(out)[0]["source"]["series_digest"] == digest
    assert run(capsys, *asked, "0123456789ab")[0] == BAD_INPUT


@pytest.mark.parametrize(
    ("words", "as_python"),
    [
        (["percentiles=5,95"], {"percentiles": (5, 95)}),
        (["percentiles=5"], {"percentiles": (5,)}),
        (["percentiles=[5, 95]"], {"percentiles": (5, 95)}),
        (["ranges=-100:0,0:100"], {"ranges": ((-100, 0), (0, 100))}),
        (["along_z=no", "bin_width=2.5"], {"along_z": False, "bin_width": 2.5}),
    ],
    ids=["list", "one", "json", "pairs", "flag"],
)
def test_settings_in_words_mean_what_python_says(capsys, folder, words, as_python):
    given = [part for word in words for part in ("--set", word)]
    code, out, err = run(
        capsys, "measure", folder, "region_statistics", "--region", WATER, "--json", *given
    )
    assert (code, err) == (DONE, "")
    [record] = json.loads(out)
    kind = find("region_statistics").settings_type
    assert record["settings"] == kind(**as_python).model_dump(mode="json")


def test_asked_percentiles_and_shares_are_printed(capsys, folder):
    code, out, _ = run(
        capsys, "measure", folder, "region_statistics", "--region", WATER,
        "--set", "percentiles=5,95", "--set", "ranges=-100:100",
    )  # fmt: skip
    assert code == DONE
    [line] = [text for text in out.splitlines() if text.startswith("  Percentiles")]
    assert "5 %: " in line
    assert "95 %: " in line
    assert any(text.startswith("  Shares") for text in out.splitlines())


def test_every_measurement_and_setting_is_listed(capsys):
    from ct_measure_plugin.measurements import NAMES

    with pytest.raises(SystemExit) as left:
        main(["measure", "--measurements"])
    assert left.value.code == 0
    out = capsys.readouterr().out
    for name in NAMES:
        assert f"{name}: {find(name).summary}" in out
        for setting in find(name).settings_type.model_fields:
            assert f"    {setting}=" in out


def test_the_installed_command_answers():
    done = subprocess.run(
        [sys.executable, "-m", "ct_measure_plugin.cli", "--help"],
        capture_output=True, text=True, check=True, timeout=60,
    )  # fmt: skip
    assert "Exit codes: 0 done, 1 a tolerance failed" in done.stdout


def test_json_on_stdout_is_nothing_but_json(capsys, folder):
    _, out, _ = run(
        capsys, "measure", folder, "region_statistics", "--region", "disc center=99,99 radius=3",
        "--json",
    )  # fmt: skip
    assert json.loads(out)[0]["measured"] is False
    assert np.isfinite(json.loads(out)[0]["source"]["spacing_mm"]).all()
