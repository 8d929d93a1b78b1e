"""Tables inside results are found by type, whatever the measurement."""

from __future__ import annotations

from dataclasses import dataclass

import pytest

from ct_measure_plugin.physics.results import Caution, Quantity, Result
from ct_measure_plugin.physics.tables import tables_of


@dataclass(frozen=True)
class Row:
    name: str
    mean: Quantity
    share: float
    place: tuple[float, float] = (0.0, 0.0)


@dataclass(frozen=True, kw_only=True, eq=False)
class Rows(Result):
    rows: tuple[Row, ...] = ()
    path: tuple[float, ...] = (1.0, 2.0)
    mixed: tuple[object, ...] = ()


ROW = Row("left", Quantity(12.34, "HU", 0.56), 0.123456)
OTHER = Row("", Quantity(-1.0, "HU", None), 1.0)


def test_only_rows_of_one_kind_are_a_table():
    found = Rows(rows=(ROW, OTHER), mixed=(ROW, ROW.mean), cautions=(Caution("simulated", "x"),))
    assert list(tables_of(found)) == ["rows"]
    assert tables_of(Rows()) == {}


def test_text_numbers_and_quantities_are_columns():
    table = tables_of(Rows(rows=(ROW, OTHER)))["rows"]
    assert table.columns == ("name", "mean", "share")
    assert table.titles == ("Name", "Mean (HU)", "Share")
    assert list(table.cells()) == [("left", "12.34 ± 0.56", "0.123"), ("", "-1", "1")]
    assert [(called, name) for called, name, _ in table.quantities()] == [
        ("left", "mean"),
        ("2", "mean"),
    ]


def test_units_that_differ_stay_out_of_the_title():
    mm = Row("b", Quantity(1.0, "mm", 0.1), 0.0)
    assert tables_of(Rows(rows=(ROW, mm)))["rows"].titles[1] == "Mean"


@pytest.mark.parametrize("columns", [("name", "mean"), ("name",)])
def test_a_column_needs_every_row(columns):
    half = Row("b", ROW.mean if "mean" in columns else None, 0.0)
    found = tables_of(Rows(rows=(ROW, half)))["rows"].columns
    assert ("mean" in found) == ("mean" in columns)
