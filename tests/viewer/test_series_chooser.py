"""Choosing among several series."""

from __future__ import annotations

from dataclasses import replace

import pytest
from qtpy.QtCore import QTimer
from qtpy.QtWidgets import QApplication, QDialogButtonBox, QWidget
from series_writer import line, noise, uid, write_series

from ct_measure_plugin.dicom import scan_series
from ct_measure_plugin.viewer.docks.series_chooser import SeriesChooser, ask_which


@pytest.fixture
def entries(tmp_path):
    for number, count in ((1, 3), (2, 5), (3, 4)):
        write_series(
            tmp_path / str(number),
            noise((count, 16, 18), number),
            line(count),
            SeriesInstanceUID=uid("series", number),
            SeriesNumber=number,
            SeriesDescription=f"Body {number}",
        )
    return scan_series(tmp_path)


@pytest.fixture
def chooser(qtbot, entries):
    made = SeriesChooser(entries)
    qtbot.addWidget(made)
    return made


def test_the_longest_series_is_chosen_first(chooser, entries):
    assert chooser.chosen() == (entries[1],)


def test_what_tells_series_apart_is_shown(chooser):
    row = [chooser.table.item(1, column).text() for column in range(chooser.table.columnCount())]
    assert row[:4] == ["2", "Body 2", "5", "16 × 18"]


def test_several_rows_and_none(chooser, entries):
    chooser.table.selectAll()
    assert chooser.chosen() == tuple(entries)
    chooser.table.clearSelection()
    assert chooser.chosen() == ()
    assert not chooser.buttons.button(QDialogButtonBox.StandardButton.Open).isEnabled()


def test_a_series_that_cannot_be_decoded_cannot_be_chosen(qtbot, entries):
    locked = replace(entries[1], decoder_missing="pip install some-decoder")
    made = SeriesChooser((entries[0], locked, entries[2]))
    qtbot.addWidget(made)
    assert made.chosen() == (entries[2],)
    made.table.selectAll()
    assert locked not in made.chosen()
    assert "pip install some-decoder" in made.table.item(1, 0).toolTip()


def press(button):
    def pressing():
        dialog = QApplication.activeModalWidget()
        dialog.buttons.button(button).click()

    QTimer.singleShot(50, pressing)


def test_asking_and_its_two_answers(qtbot, entries):
    window = QWidget()
    qtbot.addWidget(window)
    assert ask_which(entries) is None  # nobody can see it
    window.show()
    press(QDialogButtonBox.StandardButton.Open)
    assert ask_which(entries) == (entries[1],)
    press(QDialogButtonBox.StandardButton.Cancel)
    assert ask_which(entries) == ()
