"""Which of several series to open: a small table to choose from."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import Qt
from qtpy.QtWidgets import (
    QAbstractItemView,
    QApplication,
    QDialog,
    QDialogButtonBox,
    QHeaderView,
    QLabel,
    QTableWidget,
    QTableWidgetItem,
    QVBoxLayout,
    QWidget,
)

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.dicom import SeriesEntry

__all__ = ["SeriesChooser", "ask_which"]

_COLUMNS = ("No.", "Description", "Slices", "Matrix", "Thickness", "Kernel", "kV", "Cautions")


def ask_which(entries: Sequence[SeriesEntry]) -> Sequence[SeriesEntry] | None:
    """Return the series that someone chose, none of them if they cancelled.

    None if there is no visible window, so nobody to ask.
    """
    application = QApplication.instance()
    if not isinstance(application, QApplication):
        return None
    if not any(window.isVisible() for window in application.topLevelWidgets()):
        return None
    dialog = SeriesChooser(entries, application.activeWindow())
    agreed = dialog.exec() == QDialog.DialogCode.Accepted
    chosen = dialog.chosen() if agreed else ()
    dialog.deleteLater()
    return chosen


class SeriesChooser(QDialog):
    """A table of series; one or more rows can be chosen.

    The header's description is shown here, to the person at the screen, and nowhere else.
    """

    def __init__(self, entries: Sequence[SeriesEntry], parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._entries = tuple(entries)
        self.setWindowTitle("Choose series")
        self.resize(760, 320)
        self.table = self._table()
        self.buttons = QDialogButtonBox(
            QDialogButtonBox.StandardButton.Open | QDialogButtonBox.StandardButton.Cancel
        )
        self.buttons.accepted.connect(self.accept)
        self.buttons.rejected.connect(self.reject)
        layout = QVBoxLayout(self)
        layout.addWidget(QLabel("There are several CT series here. Open which?"))
        layout.addWidget(self.table)
        layout.addWidget(self.buttons)
        self.table.itemSelectionChanged.connect(self._allow)
        self.table.itemDoubleClicked.connect(lambda *_: self.accept())
        self._preselect()
        self._allow()

    def chosen(self) -> tuple[SeriesEntry, ...]:
        """Return the series of the selected rows, in their order."""
        rows = sorted({index.row() for index in self.table.selectedIndexes()})
        return tuple(self._entries[row] for row in rows)

    def _table(self) -> QTableWidget:
        table = QTableWidget(len(self._entries), len(_COLUMNS), self)
        table.setAccessibleName("CT series")
        table.setHorizontalHeaderLabels(list(_COLUMNS))
        table.verticalHeader().setVisible(False)
        table.setEditTriggers(QAbstractItemView.EditTrigger.NoEditTriggers)
        table.setSelectionBehavior(QAbstractItemView.SelectionBehavior.SelectRows)
        table.setSelectionMode(QAbstractItemView.SelectionMode.ExtendedSelection)
        for row, entry in enumerate(self._entries):
            for column, text in enumerate(_cells(entry)):
                table.setItem(row, column, _item(text, entry))
        header = table.horizontalHeader()
        header.setSectionResizeMode(QHeaderView.ResizeMode.ResizeToContents)
        header.setSectionResizeMode(1, QHeaderView.ResizeMode.Stretch)
        return table

    def _preselect(self) -> None:
        """Choose the series with most slices, of those that can be read."""
        readable = [k for k, entry in enumerate(self._entries) if not entry.decoder_missing]
        if readable:
            self.table.selectRow(max(readable, key=lambda k: self._entries[k].slice_count))

    def _allow(self) -> None:
        button = self.buttons.button(QDialogButtonBox.StandardButton.Open)
        button.setEnabled(bool(self.chosen()))


def _cells(entry: SeriesEntry) -> tuple[str, ...]:
    rows, columns = entry.matrix
    part = f" ({entry.part}/{entry.parts})" if entry.parts > 1 else ""
    return (
        f"{entry.series_number}{part}",
        entry.description,
        str(entry.slice_count),
        f"{rows} × {columns}",
        "" if entry.thickness_mm is None else f"{entry.thickness_mm[1]:g} mm",
        entry.kernel,
        "" if entry.kvp is None else f"{entry.kvp:g}",
        str(len(entry.cautions) or ""),
    )


def _item(text: str, entry: SeriesEntry) -> QTableWidgetItem:
    item = QTableWidgetItem(text)
    tips = [str(one) for one in entry.cautions]
    if entry.decoder_missing:
        tips.append(f"Its pixels need a decoder: {entry.decoder_missing}")
        item.setFlags(Qt.ItemFlag.NoItemFlags)
    item.setToolTip("\n".join(tips))
    return item
