"""Detectability by every door, and what it says of settings that do not do."""

from __future__ import annotations

import json

import numpy as np
import pytest
from noise_fields import field, ramp

import ct_measure_plugin as ctm
from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.measurements import find
from ct_measure_plugin.physics.detection_task import Task
from ct_measure_plugin.physics.results import Curve, NotMeasured
from ct_measure_plugin.records import Record, write_json
from ct_measure_plugin.run import run_measurement

WATER = ctm.regions.Box((63.75, 63.75), (127.0, 127.0), name="water")
F = np.linspace(0.0, 1.0, 60)
MTF = Curve(F, np.exp(-2 * (np.pi * 0.6 * F) ** 2), np.full(60, 0.01))


@pytest.fixture(scope="module")
def volume():
    rng = np.random.default_rng(71)
    planes = [field(rng, (320, 320), (0.5, 0.5), ramp)[:256, :256] for _ in range(2)]
    return ctm.Volume(np.rint(np.stack(planes)).astype(np.int16), (2.0, 0.5, 0.5))


def test_it_is_the_function_of_the_spectrum_of_its_regions(volume):
    noise = ctm.measure("noise_power", volume, WATER, patch_px=32)
    task = Task(contrast_hu=8.0, size_mm=3.0)
    by_hand = ctm.physics.detectability(noise, MTF, task=task)
    found = ctm.measure(
        "detectability", volume, WATER, patch_px=32, transfer=MTF, contrast_hu=8.0, size_mm=3.0
    )
    assert found.npw == by_hand.npw
    assert found.prewhitening == by_hand.prewhitening
    assert found.npwe is not None
    blind = ctm.measure(
        "detectability", volume, WATER, patch_px=32, transfer=MTF, size_mm=3.0, eye="none"
    )
    assert blind.npwe is None
    # 10 HU, the default, for 8: d′ is in proportion
    assert blind.npw.value == pytest.approx(1.25 * found.npw.value, rel=1e-9)


def test_a_spectrum_measured_before_takes_the_place_of_regions(volume):
    noise = ctm.measure("noise_power", volume, WATER, patch_px=32)
    drawn = ctm.measure("detectability", volume, WATER, patch_px=32, transfer=MTF)
    told = ctm.measure("detectability", volume, noise_spectrum=noise, transfer=MTF)
    assert told.npw == drawn.npw
    refused = ctm.measure("detectability", volume)
    assert isinstance(refused, NotMeasured)
    assert "no noise" in refused.reason


def test_a_file_of_records_gives_its_mtf(volume, tmp_path):
    """An edge measured on one series, its record's MTF used on another."""
    from truth_images import HANN, edge_image

    edge = np.rint(edge_image(HANN, shape=(56, 56), angle=5, contrast=900)).astype(np.int16)
    box = ctm.regions.Box((13.75, 13.75), (24.0, 22.0))
    scan = ctm.Volume(edge[None] + np.zeros((2, 1, 1), np.int16), (2.0, 0.5, 0.5))
    records = run_measurement("edge_mtf", scan, (box,))
    file = write_json(records, tmp_path / "mtf.json")
    by_result = ctm.measure(
        "detectability", volume, WATER, patch_px=32, transfer=records[0].answer(), eye="Eckstein"
    )
    settings = find("detectability").settings_type(patch_px=32, transfer=str(file), eye="Eckstein")
    [record] = run_measurement("detectability", volume, (WATER,), settings)
    assert record.answer().npw == by_result.npw
    again = Record.model_validate_json(record.model_dump_json())
    assert again.typed_settings() == settings


def test_what_is_no_mtf_is_refused_in_words(volume, tmp_path):
    def ask(**given):
        return ctm.measure("detectability", volume, WATER, patch_px=32, **given)

    file = tmp_path / "records.json"
    file.write_text(json.dumps([{"measured": True, "measurement": "x", "result": {}}]))
    with pytest.raises(ArgumentError, match="holds no measured MTFs"):
        ask(transfer=str(file))
    with pytest.raises(ArgumentError, match="RegionStatistics holds no MTF"):
        ask(transfer=ctm.measure("region_statistics", volume, ctm.regions.Disc((30, 30), 9)))
    with pytest.raises(ArgumentError, match="must rise"):
        ask(transfer={"frequency_per_mm": (0.2, 0.1, 0.3, 0.4), "mtf": (1, 1, 1, 1)})
    with pytest.raises(ArgumentError, match="4 or more"):
        ask(transfer={"frequency_per_mm": (0.1, 0.2), "mtf": (1, 1)})
    with pytest.raises(ArgumentError, match="contrast of 0"):
        ask(contrast_hu=0.0)
