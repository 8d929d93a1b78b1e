"""A result's own table, such as one row a rod: shown as it stands, copied as text."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import Qt
from qtpy.QtGui import QKeySequence
from qtpy.QtWidgets import QAbstractItemView, QApplication, QTableWidget, QTableWidgetItem

if TYPE_CHECKING:
    from qtpy.QtGui import QKeyEvent
    from qtpy.QtWidgets import QWidget

    from ct_measure_plugin.physics.tables import Table
    from ct_measure_plugin.viewer.theme import Colours

__all__ = ["ResultTable"]


class ResultTable(QTableWidget):
    """One table of a result, to be read."""

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.setAccessibleName("Table of the result")
        self.setEditTriggers(QAbstractItemView.EditTrigger.NoEditTriggers)
        self.setAlternatingRowColors(True)
        self.verticalHeader().setVisible(False)
        self.verticalHeader().setDefaultSectionSize(24)
        self.setMinimumHeight(190)

    def show_table(self, table: Table) -> None:
        """Show other rows."""
        cells = list(table.cells())
        shape = len(cells), len(table.titles)
        same = shape == (self.rowCount(), self.columnCount())
        self.setRowCount(shape[0])
        self.setColumnCount(shape[1])
        self.setHorizontalHeaderLabels(list(table.titles))
        for row, texts in enumerate(cells):
            for column, text in enumerate(texts):
                item = self.item(row, column)
                if item is None:
                    item = QTableWidgetItem()
                    self.setItem(row, column, item)
                if item.text() != text:
                    item.setText(text)
                    item.setTextAlignment(_alignment(text))
        if not same:
            self.resizeColumnsToContents()

    def as_text(self) -> str:
        """Return the table as lines of tab-separated cells, headings first."""
        columns = range(self.columnCount())
        lines = ["\t".join(self.horizontalHeaderItem(c).text() for c in columns)]
        lines += [
            "\t".join(self.item(row, c).text() for c in columns) for row in range(self.rowCount())
        ]
        return "\n".join(lines)

    def recolour(self, colours: Colours) -> None:
        """Take up the colours of a theme; Qt's palette stays light under a dark one."""
        self.setStyleSheet(
            f"QTableWidget {{ background: {colours.background}; color: {colours.text};"
            f" alternate-background-color: {colours.foreground}; }}"
        )

    def keyPressEvent(self, event: QKeyEvent) -> None:  # noqa: N802 - Qt's name
        """Copy the whole table where the platform's keys ask for it."""
        if event.matches(QKeySequence.StandardKey.Copy):
            QApplication.clipboard().setText(self.as_text())
        else:
            super().keyPressEvent(event)


def _alignment(text: str) -> Qt.AlignmentFlag:
    """Put numbers to the right, words to the left."""
    number = text[:1].isdigit() or text[:1] in "-−+"
    side = Qt.AlignmentFlag.AlignRight if number and text else Qt.AlignmentFlag.AlignLeft
    return side | Qt.AlignmentFlag.AlignVCenter
