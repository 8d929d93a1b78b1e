"""What goes out as CSV or JSON is complete, and harmless."""

from __future__ import annotations

import csv

import pytest
from record_maker import record_of

from ct_measure_plugin.errors import RecordError
from ct_measure_plugin.physics.results import NotMeasured, quantities_of
from ct_measure_plugin.records import read_json, write_csv, write_json
from ct_measure_plugin.records.exchange import COLUMNS
from ct_measure_plugin.records.result_text import answer_to_dict


def read(path) -> list[dict[str, str]]:
    with path.open(encoding="utf-8-sig", newline="") as stream:
        return list(csv.DictReader(stream))


def test_json_gives_the_same_records_back(tmp_path):
    records = tuple(record_of("region_statistics")[0] for _ in range(3))
    assert read_json(write_json(records, tmp_path / "r.json")) == records


def test_csv_has_one_row_a_quantity_to_the_last_bit(tmp_path):
    record, answer = record_of("region_statistics")
    rows = read(write_csv([record], tmp_path / "r.csv"))
    assert tuple(rows[0]) == COLUMNS
    found = {row["quantity"]: row for row in rows}
    for name, quantity in quantities_of(answer).items():
        assert float(found[name]["value"]) == quantity.value
        assert found[name]["unit"] == quantity.unit


def test_a_refusal_has_a_row_of_its_own(tmp_path):
    record, _ = record_of("region_statistics")
    refused = record.model_copy(
        update={"result": answer_to_dict(NotMeasured("too small", "draw it larger"))}
    )
    [row] = read(write_csv([refused], tmp_path / "r.csv"))
    assert row["not_measured"] == "too small. draw it larger"
    assert row["value"] == ""


@pytest.mark.parametrize("name", ["=cmd()", "+1", "-1", "@x", " =1"])
def test_names_cannot_become_formulas(tmp_path, name):
    record, _ = record_of("region_statistics")
    region = {**record.regions[0], "name": name}
    rows = read(write_csv([record.model_copy(update={"regions": (region,)})], tmp_path / "r.csv"))
    assert rows[0]["region"].startswith("'")


def test_a_foreign_file_is_refused(tmp_path):
    (tmp_path / "r.json").write_text('[{"a": 1}]')
    with pytest.raises(RecordError, match="does not hold records"):
        read_json(tmp_path / "r.json")
    with pytest.raises(RecordError, match="cannot be read"):
        read_json(tmp_path / "gone.json")
