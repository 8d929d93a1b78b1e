"""`ct-measure targets`: proposals that can be pasted into `ct-measure measure`."""

from __future__ import annotations

import json
import shlex
from pathlib import Path

import numpy as np
import pytest
from series_writer import line, write_series

from ct_measure_plugin.cli import BAD_INPUT, DONE, NOT_MEASURABLE, main

STANDARD = Path(__file__).parents[2] / "sample_volumes/standard"


def test_what_is_printed_can_be_pasted_and_measures(capsys):
    assert main(["targets", str(STANDARD), "--slice", "12", "--most", "3"]) == DONE
    out = capsys.readouterr().out
    pasted = [text for text in out.splitlines() if "--region" in text]
    assert len(pasted) == 3
    words = shlex.split(pasted[1])
    assert main(["measure", str(STANDARD), *words]) == DONE
    measured = capsys.readouterr().out
    value = out.split("rod-2: f50 ")[1].split(" mm")[0]
    assert "f50" in measured
    assert value in measured  # the same number as the proposal's


def test_json_holds_regions_numbers_and_reasons(capsys):
    assert main(["targets", str(STANDARD), "--slice", "12", "--most", "3", "--json"]) == DONE
    found = json.loads(capsys.readouterr().out)
    assert [one["kind"] for one in found["targets"]] == ["rod"] * 3
    first = found["targets"][0]
    assert first["measurement"] == "disc_mtf"
    assert first["region"]["kind"] == "disc"
    assert first["words"].startswith("disc center=")
    assert first["f50"]["unit"] == "mm⁻¹"
    assert first["f50"]["uncertainty"] > 0
    assert any("not tried" in other["reason"] for other in found["others"])


def test_an_even_slice_has_nothing(capsys, tmp_path):
    water = np.rint(np.random.default_rng(3).normal(0, 10, (2, 64, 64))).astype(np.int16)
    folder = write_series(tmp_path / "ct", water, line(2))
    assert main(["targets", str(folder), "--slice", "0"]) == NOT_MEASURABLE
    assert "nothing on this slice" in capsys.readouterr().err
    assert main(["targets", str(folder), "--slice", "0", "--json"]) == NOT_MEASURABLE
    assert json.loads(capsys.readouterr().out)["targets"] == []


@pytest.mark.parametrize("number", ["2", "-1"])
def test_a_slice_that_is_not_there_is_bad_input(capsys, tmp_path, number):
    folder = write_series(tmp_path / "ct", np.zeros((2, 64, 64), np.int16), line(2))
    assert main(["targets", str(folder), "--slice", number]) == BAD_INPUT
    assert "must lie within 0 to 1" in capsys.readouterr().err
