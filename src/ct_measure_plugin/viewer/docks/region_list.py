"""The list of regions: names and classes that can be edited, and a column a quantity."""

from __future__ import annotations

from dataclasses import fields
from typing import TYPE_CHECKING, Any

from qtpy.QtCore import QAbstractTableModel, QModelIndex, Qt, Signal
from qtpy.QtGui import QColor

from ct_measure_plugin.physics.results import NotMeasured, label_of

if TYPE_CHECKING:
    from ct_measure_plugin.measurements import Measurement
    from ct_measure_plugin.viewer.region_board import Row
    from ct_measure_plugin.viewer.theme import Colours

__all__ = ["CLASS", "CODE", "IMAGE", "NAME", "RegionListModel", "offered_by"]

NAME, CLASS, CODE, IMAGE = "name", "class", "code", "image"

_HEADINGS = {NAME: "Region", CLASS: "Class", CODE: "Code", IMAGE: "Image"}

_TIPS = {
    NAME: "Double-click to name the region",
    CLASS: "Double-click to say what it shows, such as liver or PTFE rod",
    CODE: "Double-click to give the class a code, scheme:value, such as SCT:10200004",
}

_FLAG = Qt.ItemFlag


def offered_by(measurement: Measurement) -> tuple[str, ...]:
    """Return the quantities of a measurement's result, those of its columns first."""
    named = [one.name for one in fields(measurement.result_type) if "Quantity" in str(one.type)]
    return tuple(dict.fromkeys([*measurement.columns, *named]))


class RegionListModel(QAbstractTableModel):
    """Rows for Qt's table view.

    Parameters
    ----------
    offered : tuple of str
        Quantities that can be shown, in order.
    wanted : tuple of str
        Those shown at first.

    Signals
    -------
    edited(column, index, text)
        Someone wrote a name, a class or a code; the index is the region's on its layer.
    refusals_changed()
        Other rows say why they were not measured.
    """

    edited = Signal(str, int, str)
    refusals_changed = Signal()

    def __init__(
        self, offered: tuple[str, ...], wanted: tuple[str, ...], parent: Any = None
    ) -> None:
        super().__init__(parent)
        self.offered = offered
        self.wanted = wanted
        self.codes = False
        self._rows: tuple[Row, ...] = ()
        self._columns: tuple[str, ...] = (NAME, CLASS)
        self._colours: Colours | None = None

    # --- to be told -----------------------------------------------------------------

    @property
    def rows(self) -> tuple[Row, ...]:
        """The rows shown."""
        return self._rows

    @property
    def columns(self) -> tuple[str, ...]:
        """The columns shown."""
        return self._columns

    @property
    def lead(self) -> int:
        """How many columns come before the numbers."""
        return next(i for i, column in enumerate(self._columns) if column not in _HEADINGS)

    @property
    def numbers(self) -> int:
        """How many columns hold numbers; they are side by side."""
        return sum(column not in _HEADINGS for column in self._columns)

    def show(self, rows: tuple[Row, ...]) -> bool:
        """Show other rows; return whether the table's shape changed."""
        columns = self._columns_for(rows)
        if len(rows) != len(self._rows) or columns != self._columns:
            self.beginResetModel()
            self._rows, self._columns = rows, columns
            self.endResetModel()
            self.refusals_changed.emit()
            return True
        before, self._rows = self._rows, rows
        changed = [i for i, row in enumerate(rows) if row is not before[i] and row != before[i]]
        last = len(self._columns) - 1
        for first, end in _runs(changed):
            self.dataChanged.emit(self.index(first, 0), self.index(end, last))
        if any(_refused(rows[i]) != _refused(before[i]) for i in changed):
            self.refusals_changed.emit()
        return False

    def want(self, columns: tuple[str, ...], *, codes: bool) -> None:
        """Show other quantities, and whether to show codes."""
        self.wanted, self.codes = columns, codes
        self.beginResetModel()
        self._columns = self._columns_for(self._rows)
        self.endResetModel()

    def recolour(self, colours: Colours) -> None:
        """Take up the colours of a theme."""
        self._colours = colours

    # --- what stands where ----------------------------------------------------------

    def text(self, row: int, column: int) -> str:
        """Return a cell's text."""
        line, name = self._rows[row], self._columns[column]
        if name in _HEADINGS:
            return {NAME: line.name, CLASS: line.group, CODE: line.code, IMAGE: line.mark}[name]
        if isinstance(line.answer, NotMeasured):
            if not line.complete:
                return "…" if column == self.lead else ""
            return f"not measured: {line.answer.reason}" if column == self.lead else ""
        quantity = line.quantity(name)
        return "" if quantity is None else " ± ".join(part for part in quantity.rounded() if part)

    def heading(self, column: int) -> str:
        """Return a column's heading with its unit."""
        name = self._columns[column]
        if name in _HEADINGS:
            return _HEADINGS[name]
        unit = self._unit(name)
        return f"{label_of(name)} ({unit})" if unit else label_of(name)

    def as_text(self, rows: list[int] | None = None) -> str:
        """Return rows as lines of tab-separated cells, headings first.

        Numbers are not rounded, and uncertainties have columns of their own, so that a spreadsheet
        takes them as numbers.
        """
        chosen = range(len(self._rows)) if rows is None else rows
        heads: list[str] = []
        lines: list[list[str]] = [[] for _ in chosen]
        for column, name in enumerate(self._columns):
            if name in _HEADINGS:
                heads.append(_HEADINGS[name])
                for line, row in zip(lines, chosen, strict=True):
                    text = self._rows[row].image if name == IMAGE else self.text(row, column)
                    line.append(" ".join(text.split()))
                continue
            found = [
                None if self._rows[row].stale else self._rows[row].quantity(name) for row in chosen
            ]
            doubtful = any(one is not None and one.uncertainty for one in found)
            heads += [self.heading(column), *([f"u({self.heading(column)})"] if doubtful else [])]
            for line, one, row in zip(lines, found, chosen, strict=True):
                refusal = self.text(row, column) if one is None else ""
                if self._rows[row].stale:
                    refusal = "being measured" if column == self.lead else ""
                line.append(refusal if one is None else repr(one.value))
                if doubtful:
                    line.append(repr(one.uncertainty) if one and one.uncertainty else "")
        return "\n".join("\t".join(cells) for cells in [heads, *lines])

    def _columns_for(self, rows: tuple[Row, ...]) -> tuple[str, ...]:
        several = any(row.mark for row in rows)
        codes = self.codes or any(row.code for row in rows)
        used = tuple(
            name
            for name in self.offered
            if name in self.wanted and any(row.quantity(name) is not None for row in rows)
        )
        words = (CLASS, *((CODE,) if codes else ()))
        numbers = used or self.wanted[:1]
        if several:  # a narrow dock shows numbers beside the image, and words after them
            return (NAME, IMAGE, *numbers, *words)
        return (NAME, *words, *numbers)

    def _unit(self, name: str) -> str:
        units = {q.unit for q in (row.quantity(name) for row in self._rows) if q is not None}
        return units.pop() if len(units) == 1 else ""

    # --- Qt's names -----------------------------------------------------------------

    def rowCount(self, parent: QModelIndex | None = None) -> int:  # noqa: N802, D102
        return 0 if parent is not None and parent.isValid() else len(self._rows)

    def columnCount(self, parent: QModelIndex | None = None) -> int:  # noqa: N802, D102
        return 0 if parent is not None and parent.isValid() else len(self._columns)

    def data(self, index: QModelIndex, role: int = Qt.ItemDataRole.DisplayRole) -> Any:  # noqa: D102
        row, column = index.row(), index.column()
        line, name = self._rows[row], self._columns[column]
        if role == Qt.ItemDataRole.EditRole:
            return self.text(row, column)
        if role == Qt.ItemDataRole.DisplayRole:
            text = self.text(row, column)
            return f"⚠ {text}" if column == 0 and line.warnings() else text
        if role == Qt.ItemDataRole.ToolTipRole:
            return self._tip(line, name)
        if role == Qt.ItemDataRole.TextAlignmentRole and name not in _HEADINGS and line.answer:
            return int(Qt.AlignmentFlag.AlignRight | Qt.AlignmentFlag.AlignVCenter)
        if role == Qt.ItemDataRole.UserRole:
            quantity = line.quantity(name)
            return self.text(row, column) if quantity is None else quantity.value
        if role == Qt.ItemDataRole.ForegroundRole and self._colours is not None:
            return self._ink(line)
        return None

    def _ink(self, line: Row) -> QColor | None:
        """Return a paler ink for what is still moving, and for lines that repeat a region."""
        if line.complete or self._colours is None:
            return None
        ink = QColor(self._colours.text)
        ink.setAlpha(150)
        return ink

    def _tip(self, line: Row, name: str) -> str:
        if name in _TIPS:
            return _TIPS[name]
        if name == IMAGE:
            return line.image
        if line.stale:
            return "It has changed and is being measured; the number is the one before."
        said = [str(line.answer)] if isinstance(line.answer, NotMeasured) else []
        return "\n".join([*said, *(str(caution) for caution in line.answer.cautions)])

    def setData(  # noqa: N802
        self, index: QModelIndex, value: Any, role: int = Qt.ItemDataRole.EditRole
    ) -> bool:
        """Ask for a region's new name, class or code."""
        name = self._columns[index.column()]
        if role != Qt.ItemDataRole.EditRole or name not in _TIPS:
            return False
        text = str(value).strip()
        if text == self.text(index.row(), index.column()) or (name == NAME and not text):
            return False
        self.edited.emit(name, self._rows[index.row()].index, text)
        return True

    def flags(self, index: QModelIndex) -> Qt.ItemFlag:  # noqa: D102
        base = super().flags(index)
        line, name = self._rows[index.row()], self._columns[index.column()]
        return base | _FLAG.ItemIsEditable if name in _TIPS and not line.difference else base

    def headerData(  # noqa: N802, D102
        self, section: int, orientation: Qt.Orientation, role: int = Qt.ItemDataRole.DisplayRole
    ) -> Any:
        if orientation == Qt.Orientation.Vertical or section >= len(self._columns):
            return None
        if role == Qt.ItemDataRole.ToolTipRole:
            return f"{self.heading(section)}. Click to sort; right-click to choose columns."
        return self.heading(section) if role == Qt.ItemDataRole.DisplayRole else None


def _refused(row: Row) -> bool:
    return row.complete and not row.answer


def _runs(numbers: list[int]) -> list[tuple[int, int]]:
    """Return the first and last of each run of neighbours in increasing numbers."""
    found: list[tuple[int, int]] = []
    for number in numbers:
        if found and found[-1][1] == number - 1:
            found[-1] = (found[-1][0], number)
        else:
            found.append((number, number))
    return found
