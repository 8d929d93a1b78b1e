"""The CT-number line through every door: record, JSON, table, report, and the command."""

from __future__ import annotations

import csv
import json

import numpy as np
import pytest
from rod_images import RING, ring_of_rods
from series_writer import line, write_series

import ct_measure_plugin as ctm
from ct_measure_plugin.cli import DONE, NOT_MEASURABLE, main
from ct_measure_plugin.records import read_json
from ct_measure_plugin.run import run_measurement


@pytest.fixture(scope="module")
def volume():
    return ring_of_rods(noise=5.0, seed=1)


def series_of(folder, volume):
    """Write a volume as a series of pixels of 0.5 mm whose stored zero is -1024 HU."""
    stored = (volume.hu + 1024).astype(np.int16)
    return write_series(folder / "ct", stored, line(len(stored)), PixelSpacing=[0.5, 0.5])


def words(region):
    y, x = region.center_mm
    return f"disc center={y:.3f},{x:.3f} radius={region.radius_mm} name={region.name}"


def test_a_record_gives_the_same_answer_back(volume):
    [record] = run_measurement("ct_number_line", volume, RING)
    again = type(record).model_validate_json(record.model_dump_json()).answer()
    first = ctm.measure("ct_number_line", volume, RING)
    assert again.effective_energy == first.effective_energy
    assert again.rods == first.rods
    np.testing.assert_array_equal(again.energy_curve.y, first.energy_curve.y)


@pytest.fixture(scope="module")
def outputs(tmp_path_factory, volume):
    """Everything that one command writes; pixels of 0.5 mm, so millimetres are those of RING."""
    folder = tmp_path_factory.mktemp("line")
    series = series_of(folder, volume)
    arguments = ["measure", str(series), "ct_number_line", "--set", "further_hu=0.5"]
    origin = ctm.read_series(series).origin_mm
    for region in RING:
        y, x = region.center_mm
        moved = ctm.regions.Disc((y + origin[1], x + origin[2]), region.radius_mm, name=region.name)
        arguments += ["--region", words(moved)]
    files = {name: folder / f"out.{name}" for name in ("csv", "html", "json")}
    arguments += ["--csv", str(files["csv"]), "--report", str(files["html"])]
    assert main([*arguments, "--save", str(files["json"])]) == DONE
    return files


def test_the_table_has_a_row_a_rod(outputs):
    with outputs["csv"].open(encoding="utf-8-sig") as stream:
        rows = list(csv.DictReader(stream))
    energy = [row for row in rows if row["quantity"] == "effective_energy"]
    assert len(energy) == 1
    residuals = [row for row in rows if row["quantity"] == "rods.residual"]
    assert [row["region"] for row in residuals] == [region.name for region in RING]
    assert all(row["unit"] == "HU" and float(row["uncertainty"]) > 0 for row in residuals)


def test_the_report_shows_rods_line_and_energy(outputs):
    page = outputs["html"].read_text(encoding="utf-8")
    for text in ("CT-number line", "Effective energy", "Density read (g/cm³)", "nylon-6", "<svg"):
        assert text in page
    assert page.count("<td>PMMA</td>") == 2  # its name and its material


def test_saved_records_hold_everything(outputs):
    [record] = read_json(outputs["json"])
    assert record.settings["further_hu"] == 0.5
    assert len(record.answer().rods) == len(RING)


def test_the_command_prints_the_rods_and_refuses_too_few(capsys, tmp_path, volume):
    series = series_of(tmp_path, volume)
    y0, x0 = ctm.read_series(series).origin_mm[1:]
    regions = []
    for region in RING:
        y, x = region.center_mm
        regions += ["--region", f"disc center={y + y0},{x + x0} radius=3"]
    names = ",".join(region.name for region in RING)
    base = ["measure", str(series), "ct_number_line"]
    assert main([*base, *regions, "--set", f"rods={names}"]) == DONE
    out = capsys.readouterr().out
    assert "Effective energy" in out
    assert "polycarbonate" in out
    few = ",".join(region.name for region in RING[:3])
    assert main([*base, *regions[:6], "--set", f"rods={few}", "--json"]) == NOT_MEASURABLE
    found = json.loads(capsys.readouterr().out)
    assert found[0]["measured"] is False
