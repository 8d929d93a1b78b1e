"""A record rebuilds its answer to the last bit and re-runs from itself."""

from __future__ import annotations

import json

import numpy as np
import pytest
from examples import EXAMPLES
from pydantic import ValidationError
from record_maker import record_of

from ct_measure_plugin.errors import RecordError
from ct_measure_plugin.measurements import NAMES, find
from ct_measure_plugin.physics.results import (
    Curve,
    NotMeasured,
    Picture,
    curves_of,
    pictures_of,
    quantities_of,
)
from ct_measure_plugin.records import Record


@pytest.mark.parametrize("name", NAMES)
def test_every_measurements_result_survives_text(name):
    record, answer = record_of(name)
    again = Record.model_validate_json(record.model_dump_json()).answer()
    assert type(again) is type(answer)
    assert quantities_of(again) == quantities_of(answer)
    assert again.cautions == answer.cautions
    for key, curve in curves_of(answer).items():
        other = curves_of(again)[key]
        assert isinstance(other, Curve)
        np.testing.assert_array_equal(other.x, curve.x)
        np.testing.assert_array_equal(other.y, curve.y)
    for key, picture in pictures_of(answer).items():
        other_picture = pictures_of(again)[key]
        assert isinstance(other_picture, Picture)
        np.testing.assert_array_equal(other_picture.values, picture.values)


@pytest.mark.parametrize("name", NAMES)
def test_a_record_names_settings_and_regions_completely(name):
    record, _ = record_of(name)
    example = EXAMPLES[name]()
    again = Record.model_validate_json(record.model_dump_json())
    assert again.typed_settings() == find(name).settings_type(**example.settings)
    assert len(again.typed_regions()) == len(example.regions)


def test_a_refusal_is_recorded_with_its_reason():
    example = EXAMPLES["region_statistics"]()
    settings = find("region_statistics").settings_type()
    answer = NotMeasured("too few pixels", "draw it larger")
    record = Record.of("region_statistics", settings, example.regions, example.volume, answer)
    assert not record.measured
    assert Record.model_validate_json(record.model_dump_json()).answer() == answer


def test_a_record_never_changes():
    record, _ = record_of("region_statistics")
    with pytest.raises(ValidationError, match="frozen"):
        record.measurement = "other"


@pytest.mark.parametrize(
    "damage",
    [
        {"is": "Popen", "args": ["echo"]},
        {"is": "RegionStatistics"},
        {"mean": 1},
        {"is": "Quantity", "value": float("nan"), "unit": "HU"},
        {"is": "Quantity", "value": 1.0, "unit": "HU"},
    ],
    ids=["foreign class", "fields gone", "no class", "not finite", "a part, not a result"],
)
def test_a_damaged_result_is_refused(damage):
    record, _ = record_of("region_statistics")
    broken = record.model_copy(update={"result": damage})
    with pytest.raises(RecordError):
        broken.answer()


def test_the_record_is_plain_json():
    record, _ = record_of("region_statistics")
    text = record.model_dump_json()
    assert json.loads(text)["result"]["mean"]["unit"] == "HU"
