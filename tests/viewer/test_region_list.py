"""The list of regions: columns, order, copying, and what of it is selected."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from qtpy.QtCore import Qt
from qtpy.QtWidgets import QApplication

from ct_measure_plugin.measurements import find
from ct_measure_plugin.physics.region_statistics import region_statistics
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.viewer.docks.region_list import RegionListModel, offered_by
from ct_measure_plugin.viewer.docks.region_view import RegionView
from ct_measure_plugin.viewer.region_board import Row

STATISTICS = find("region_statistics")


def answer(mean, seed=1):
    image = np.random.default_rng(seed).normal(mean, 10, (20, 20))
    return region_statistics(image, spacing_mm=(0.5, 0.5))


ROWS = (
    Row(0, "water", "insert", "", answer(0.0)),
    Row(1, "Air", "", "", answer(-990.0)),
    Row(2, "odd", "", "", NotMeasured("it crosses itself", "draw it again")),
    Row(3, "bone", "insert", "", answer(800.0)),
)


@pytest.fixture
def listed(qtbot):
    model = RegionListModel(offered_by(STATISTICS), STATISTICS.columns)
    view = RegionView(model)
    qtbot.addWidget(view)
    model.show(ROWS)
    view.fit_columns()
    return model, view


def names(view):
    proxy = view.model()
    return [proxy.index(i, 0).data().removeprefix("⚠ ") for i in range(proxy.rowCount())]


def test_numbers_are_sorted_as_numbers_and_refusals_last(listed):
    model, view = listed
    column = model.columns.index("mean")
    view.sortByColumn(column, Qt.SortOrder.AscendingOrder)
    assert names(view) == ["Air", "water", "bone", "odd"]
    view.sortByColumn(0, Qt.SortOrder.AscendingOrder)
    assert names(view) == ["Air", "bone", "odd", "water"]
    view.sortByColumn(-1, Qt.SortOrder.AscendingOrder)
    assert names(view) == ["water", "Air", "odd", "bone"]


def test_choosing_follows_the_region_whatever_the_order(listed):
    model, view = listed
    told = []
    view.chosen_changed.connect(lambda: told.append(view.chosen()))
    view.sortByColumn(model.columns.index("mean"), Qt.SortOrder.AscendingOrder)
    view.selectRow(0)
    assert told == [[1]]
    view.choose({3})
    assert view.chosen() == [3]
    assert told == [[1]]  # who chooses from outside is not told


def test_a_refusal_runs_over_the_columns_after_it_wherever_it_stands(listed):
    model, view = listed
    lead = model.lead
    assert view.columnSpan(2, lead) == model.numbers
    view.sortByColumn(model.columns.index("mean"), Qt.SortOrder.AscendingOrder)
    assert view.columnSpan(3, lead) == model.numbers
    assert view.columnSpan(2, lead) == 1
    healed = (*ROWS[:2], replace(ROWS[2], answer=answer(5.0)), ROWS[3])
    assert not model.show(healed)
    assert view.columnSpan(3, lead) == 1


def test_columns_are_chosen_and_keep_their_order(listed):
    model, view = listed
    menu = view.columns_menu()
    actions = {action.text(): action for action in menu.actions()}
    assert actions["Mean"].isChecked()
    assert not actions["Skewness"].isChecked()
    view.choose({1})
    actions["Skewness"].setChecked(True)
    actions["SD"].setChecked(False)
    actions["Code"].setChecked(True)
    shown = model.columns
    assert "sd" not in shown
    assert shown.index("median") < shown.index("skewness")
    assert shown[:3] == ("name", "class", "code")
    assert view.chosen() == [1]


def test_several_images_show_their_number_first_and_copy_their_name(listed):
    model, view = listed
    rows = tuple(
        replace(ROWS[0], image=image, mark=mark)
        for image, mark in (("standard", "1"), ("sharp", "2"))
    )
    difference = replace(ROWS[0], image="sharp − standard", mark="2 − 1", difference=True)
    model.show((*rows, difference))
    assert model.columns[:3] == ("name", "image", "mean")
    assert [model.text(i, 1) for i in range(3)] == ["1", "2", "2 − 1"]
    assert model.index(1, 1).data(Qt.ItemDataRole.ToolTipRole) == "sharp"
    lines = model.as_text().splitlines()
    assert lines[3].split("\t")[1] == "sharp − standard"
    editable = Qt.ItemFlag.ItemIsEditable
    assert model.flags(model.index(0, 0)) & editable
    assert not model.flags(model.index(2, 0)) & editable
    view.choose({0})
    assert view.chosen_rows() == [0, 1]  # the difference is no region of its own


def test_what_is_still_moving_is_paler_and_says_nothing_false(listed):
    model, view = listed
    from ct_measure_plugin.viewer.theme import Colours

    colours = Colours(True, "#000000", "#222222", "#ffffff", "#444444", "#ffff00", "#ff0000", ())
    view.recolour(colours)
    waiting = NotMeasured("it is being measured", "wait a moment")
    model.show((replace(ROWS[0], complete=False), replace(ROWS[1], answer=waiting, complete=False)))
    ink = model.index(0, 2).data(Qt.ItemDataRole.ForegroundRole)
    assert ink.alpha() < 255
    assert model.text(1, model.lead) == "…"
    model.show(ROWS[:2])
    assert model.index(0, 2).data(Qt.ItemDataRole.ForegroundRole) is None


def test_a_number_of_where_the_region_was_is_never_copied(listed):
    model, _ = listed
    model.show((replace(ROWS[0], complete=False, stale=True), ROWS[1]))
    assert model.text(0, 2) != ""
    first, second = (line.split("\t") for line in model.as_text().splitlines()[1:])
    assert first[2:] == ["being measured", *[""] * (len(first) - 3)]
    assert float(second[2]) == ROWS[1].answer.mean.value


def test_ctrl_c_copies_the_chosen_rows_and_delete_asks(listed, qtbot):
    _, view = listed
    view.show()
    view.choose({0, 3})
    qtbot.keyClick(view, Qt.Key.Key_C, Qt.KeyboardModifier.ControlModifier)
    lines = QApplication.clipboard().text().splitlines()
    assert [line.split("\t")[0] for line in lines] == ["Region", "water", "bone"]
    told = []
    view.delete_asked.connect(lambda: told.append(1))
    qtbot.keyClick(view, Qt.Key.Key_Delete)
    assert told == [1]


def test_only_what_changed_is_told_to_the_view(listed):
    model, _ = listed
    told = []
    model.dataChanged.connect(lambda first, last: told.append((first.row(), last.row())))
    other = answer(3.0, seed=2)
    model.show((replace(ROWS[0], answer=other), replace(ROWS[1], answer=other), *ROWS[2:]))
    assert told == [(0, 1)]
    model.show((replace(ROWS[0], answer=other), replace(ROWS[1], answer=other), *ROWS[2:]))
    assert told == [(0, 1)]
