"""Records that one command saved, as settings of the next."""

from __future__ import annotations

import json

import numpy as np
import pytest
from series_writer import line, write_series

import ct_measure_plugin as ctm
from ct_measure_plugin.cli import BAD_INPUT, DONE, main
from ct_measure_plugin.run.one import content_digest

WATER = "box center=16,16 size=30,30"
DISC = "disc center=16,16 radius=4 slice=1"


def run(capsys, *arguments) -> tuple[int, str, str]:
    code = main([str(argument) for argument in arguments])
    out, err = capsys.readouterr()
    return code, out, err


@pytest.fixture
def folder(tmp_path):
    rng = np.random.default_rng(5)
    stored = np.rint(rng.normal(1024, 12, (4, 128, 128))).astype(np.int16)
    return write_series(tmp_path / "ct", stored, line(4))


def test_a_saved_spectrum_states_standard_errors_and_detectability(capsys, folder, tmp_path):
    file = tmp_path / "spectrum.json"
    asked = ("measure", folder, "noise_power", "--region", WATER, "--set", "patch_px=16")
    code, _, _ = run(capsys, *asked, "--save", file)
    assert code == DONE
    given = ("--set", f"noise_spectrum={file}", "--json")
    code, out, _ = run(capsys, "measure", folder, "region_statistics", "--region", DISC, *given)
    assert code == DONE
    volume = ctm.read_series(folder)
    spectrum = ctm.measure("noise_power", volume, ctm.regions.Box((16, 16), (30, 30)), patch_px=16)
    disc = ctm.regions.Disc((16, 16), 4, z_mm=float(volume.positions_mm[1]))
    expected = ctm.measure("region_statistics", volume, disc, noise_spectrum=spectrum)
    mean = json.loads(out)[0]["result"]["mean"]
    assert mean["uncertainty"] == expected.mean.uncertainty
    code, out, _ = run(capsys, "measure", folder, "detectability", *given, "--set", "size_mm=3")
    assert code == DONE
    task = ctm.measure("detectability", volume, noise_spectrum=spectrum, size_mm=3.0)
    assert json.loads(out)[0]["result"]["npw"]["value"] == task.npw.value


def test_a_file_without_a_spectrum_is_bad_input_in_one_sentence(capsys, folder, tmp_path):
    file = tmp_path / "other.json"
    file.write_text("[]")
    code, out, err = run(
        capsys, "measure", folder, "region_statistics", "--region", DISC,
        "--set", f"noise_spectrum={file}",
    )  # fmt: skip
    assert (code, out) == (BAD_INPUT, "")
    assert "other.json holds no measured noise power spectra; one is wanted" in err
    assert "Value error" not in err


def test_a_repeat_scan_takes_the_object_off(capsys, tmp_path):
    """An object that no detrending takes out: the difference holds the noise of one scan."""
    y, x = np.mgrid[:64, :64]
    thing = 1024 + 60 * np.sin(x / 5.0) * np.cos(y / 7.0)
    rng = np.random.default_rng(6)
    for name in ("one", "two"):
        stored = np.rint(thing + rng.normal(0, 10, (4, 64, 64))).astype(np.int16)
        write_series(tmp_path / name, stored, line(4))
    asked = (
        "measure", tmp_path / "one", "noise_power", "--region", "disc center=6,6 radius=15",
        "--set", "patch_px=16", "--set", "detrend=mean", "--json",
    )  # fmt: skip
    code, out, _ = run(capsys, *asked, "--subtract", tmp_path / "two")
    assert code == DONE
    [record] = json.loads(out)
    sd = record["result"]["sd"]
    # whole numbers add a twelfth of a step to the variance of each scan
    assert abs(sd["value"] - np.hypot(10, 1 / 12**0.5)) < 3 * sd["uncertainty"]
    assert "−" in record["source"]["title"]
    volumes = [ctm.read_series(tmp_path / name) for name in ("one", "two")]
    assert record["source"]["content_digest"] == content_digest(
        ctm.physics.scan_difference(*volumes)
    )
    code, _, err = run(capsys, *asked, "--subtract", tmp_path / "two", "--dicom", tmp_path / "x")
    assert code == BAD_INPUT
    assert "cannot be combined with --subtract" in err
