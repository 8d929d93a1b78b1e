"""A form grows from settings: types to controls, bounds to ranges, faults to words."""

from __future__ import annotations

from pathlib import Path
from typing import Literal

import pytest
from pydantic import Field, field_validator

from ct_measure_plugin.measurements import NAMES, Settings, find
from ct_measure_plugin.viewer.docks.form import SettingsForm


class Sample(Settings):
    method: Literal["fitted", "conventional"] = Field("fitted", title="Way", description="How.")
    repeats: int = Field(5, ge=1, le=9)
    width_mm: float = Field(2.5, gt=0)
    smooth: bool = False
    diameter_mm: float | None = Field(None, ge=0.01, le=3)
    levels: tuple[float, ...] = ()
    ranges: tuple[tuple[float, float], ...] = Field((), title="Ranges")
    rods: tuple[str, ...] = ()
    table: tuple[int, ...] | tuple[str, ...] = Field((), json_schema_extra={"file": "a table"})

    @field_validator("table", mode="before")
    @classmethod
    def _read(cls, given):
        return Path(given).read_text().split() if isinstance(given, str) else given


@pytest.fixture
def form(qtbot):
    made = SettingsForm(Sample)
    qtbot.addWidget(made.native)
    made.heard = []
    made.changed.connect(made.heard.append)
    return made


def test_every_field_gets_a_control_with_its_words(form):
    assert list(form._controls) == list(Sample.model_fields)
    way = form._controls["method"]
    assert (way.label, way.tooltip) == ("Way", "How.")
    assert way.choices == ("fitted", "conventional")
    assert form._controls["width_mm"].label == "Width mm"
    assert form._controls["repeats"].min == 1
    assert form._controls["repeats"].max == 9
    assert way.native.accessibleName() == "Way"


def test_a_change_gives_new_settings_once(form):
    form._controls["method"].value = "conventional"
    assert form.settings == Sample(method="conventional")
    assert form.heard == [Sample(method="conventional")]


def test_an_optional_number_is_none_until_ticked(form):
    control = form._controls["diameter_mm"]
    assert form.settings.diameter_mm is None
    control._tick.value = True
    control._inner.value = 0.2
    assert form.settings.diameter_mm == pytest.approx(0.2)
    control._tick.value = False
    assert form.settings.diameter_mm is None


def test_what_is_not_valid_is_said_and_not_used(form):
    told = []
    form.told.connect(told.append)
    form._controls["width_mm"].value = 0.0
    assert form.settings == Sample()
    assert told == [form.problem]
    assert form.problem.startswith("Width mm: Input should be greater than 0")
    form._controls["width_mm"].value = 1.0
    assert form.problem == ""
    assert told[1:] == [""]
    assert form.settings.width_mm == 1.0


def test_several_numbers_and_ranges_are_written_in_a_line(form):
    form._controls["levels"]._line.value = "0.3; 0.05 1e-2"
    assert form.settings.levels == (0.3, 0.05, 0.01)
    form._controls["ranges"]._line.value = "−10 to 10, 30 to 60"
    assert form.settings.ranges == ((-10.0, 10.0), (30.0, 60.0))
    form._controls["ranges"]._line.value = "30 to"
    assert form.settings.ranges == ((-10.0, 10.0), (30.0, 60.0))
    assert form.problem.startswith("Ranges: ")
    form.show(Sample(levels=(0.25,), ranges=((0.0, 5.5),)))
    assert form._controls["levels"]._line.value == "0.25"
    assert form._controls["ranges"]._line.value == "0 to 5.5"


def test_words_are_written_in_a_line(form):
    form._controls["rods"]._line.value = "PTFE, LDPE; water"
    assert form.settings.rods == ("PTFE", "LDPE", "water")
    form.show(Sample(rods=("air",)))
    assert form._controls["rods"]._line.value == "air"


def test_a_file_s_content_is_the_setting(form, tmp_path):
    """The path is not kept: it would not mean anything elsewhere."""
    (tmp_path / "table.txt").write_text("a b")
    form._controls["table"]._file.line_edit.value = str(tmp_path / "table.txt")
    assert form.settings.table == ("a", "b")
    form.show(Sample(table=("c",)))
    form._controls["repeats"].value = 7
    assert form.settings.table == ("c",)


def test_showing_settings_tells_once(form):
    wanted = Sample(repeats=3, diameter_mm=1.5, smooth=True)
    form.show(wanted)
    assert form.heard == [wanted]
    assert form._controls["repeats"].value == 3
    assert form._controls["diameter_mm"].value == pytest.approx(1.5)


@pytest.mark.parametrize("name", NAMES)
def test_every_measurement_has_a_form(name, qtbot):
    form = SettingsForm(find(name).settings_type)
    qtbot.addWidget(form.native)
    assert len(form) == len(find(name).settings_type.model_fields)
    assert form.problem == ""
