"""The table of regions: a row a shape, a column a quantity, or the reason there is none."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from qtpy.QtCore import QAbstractTableModel, QModelIndex, Qt, Signal
from qtpy.QtWidgets import QAbstractItemView, QHeaderView, QTableView

from ct_measure_plugin.physics.results import NotMeasured, Quantity, Result, label_of

if TYPE_CHECKING:
    from qtpy.QtWidgets import QWidget

    from ct_measure_plugin.viewer.theme import Colours

__all__ = ["RegionTable", "Row", "TableModel"]


@dataclass(frozen=True, slots=True)
class Row:
    """One region and what was found in it.

    Attributes
    ----------
    name : str
        What people call the region.
    answer : Result or NotMeasured
        What was found.
    """

    name: str
    answer: Result | NotMeasured

    def quantity(self, column: str) -> Quantity | None:
        """Return one of the answer's quantities, None if it has none of that name."""
        found = getattr(self.answer, column, None)
        return found if isinstance(found, Quantity) else None

    def warnings(self) -> int:
        """Return how many warnings the answer carries."""
        return sum(caution.kind.level == "warning" for caution in self.answer.cautions)


class TableModel(QAbstractTableModel):
    """Rows for Qt's table view; the first column can be edited."""

    renamed = Signal(int, str)

    def __init__(self, columns: tuple[str, ...], parent: Any = None) -> None:
        super().__init__(parent)
        self._offered = columns
        self._columns: tuple[str, ...] = ()
        self._rows: tuple[Row, ...] = ()

    @property
    def rows(self) -> tuple[Row, ...]:
        """The rows shown."""
        return self._rows

    def offer(self, columns: tuple[str, ...]) -> None:
        """Offer other columns: fields of another measurement's result; the rows go."""
        self.beginResetModel()
        self._offered, self._columns, self._rows = columns, (), ()
        self.endResetModel()

    def show(self, rows: tuple[Row, ...]) -> bool:
        """Show other rows; return whether the table's shape changed."""
        used = tuple(c for c in self._offered if any(row.quantity(c) is not None for row in rows))
        if len(rows) != len(self._rows) or used != self._columns:
            self.beginResetModel()
            self._rows, self._columns = rows, used
            self.endResetModel()
            return True
        changed = [i for i, row in enumerate(rows) if row != self._rows[i]]
        self._rows = rows
        for i in changed:
            self.dataChanged.emit(self.index(i, 0), self.index(i, len(self._columns)))
        return False

    def text(self, row: int, column: int) -> str:
        """Return a cell's text."""
        line = self._rows[row]
        if column == 0:
            return line.name
        if isinstance(line.answer, NotMeasured):
            return f"not measured: {line.answer.reason}" if column == 1 else ""
        quantity = line.quantity(self._columns[column - 1]) if self._columns else None
        return "" if quantity is None else " ± ".join(part for part in quantity.rounded() if part)

    def heading(self, column: int) -> str:
        """Return a column's heading with its unit."""
        if column == 0:
            return "Region"
        if not self._columns:
            return ""
        name = self._columns[column - 1]
        units = {q.unit for q in (row.quantity(name) for row in self._rows) if q is not None}
        unit = units.pop() if len(units) == 1 else ""
        return f"{label_of(name)} ({unit})" if unit else label_of(name)

    def as_text(self) -> str:
        """Return the table as lines of tab-separated cells, headings first."""
        width = self.columnCount()
        lines = ["\t".join(self.heading(c) for c in range(width))]
        lines += ["\t".join(self.text(r, c) for c in range(width)) for r in range(len(self._rows))]
        return "\n".join(lines)

    # --- Qt's names -----------------------------------------------------------------

    def rowCount(self, parent: QModelIndex | None = None) -> int:  # noqa: N802, D102
        return 0 if parent is not None and parent.isValid() else len(self._rows)

    def columnCount(self, parent: QModelIndex | None = None) -> int:  # noqa: N802, D102
        return 0 if parent is not None and parent.isValid() else 1 + max(1, len(self._columns))

    def data(self, index: QModelIndex, role: int = Qt.ItemDataRole.DisplayRole) -> Any:  # noqa: D102
        row, column = index.row(), index.column()
        if role in (Qt.ItemDataRole.DisplayRole, Qt.ItemDataRole.EditRole):
            text = self.text(row, column)
            if role == Qt.ItemDataRole.DisplayRole and column == 0 and self._rows[row].warnings():
                return f"⚠ {text}"
            return text
        if role == Qt.ItemDataRole.ToolTipRole:
            answer = self._rows[row].answer
            said = [str(answer)] if isinstance(answer, NotMeasured) else []
            return "\n".join([*said, *(str(caution) for caution in answer.cautions)])
        measured = not isinstance(self._rows[row].answer, NotMeasured)
        if role == Qt.ItemDataRole.TextAlignmentRole and column > 0 and measured:
            return int(Qt.AlignmentFlag.AlignRight | Qt.AlignmentFlag.AlignVCenter)
        if role == Qt.ItemDataRole.UserRole and column > 0 and self._columns:
            quantity = self._rows[row].quantity(self._columns[column - 1])
            return None if quantity is None else quantity.value
        return None

    def setData(  # noqa: N802
        self, index: QModelIndex, value: Any, role: int = Qt.ItemDataRole.EditRole
    ) -> bool:
        """Ask for a region's new name."""
        if role != Qt.ItemDataRole.EditRole or index.column() != 0 or not str(value).strip():
            return False
        self.renamed.emit(index.row(), str(value).strip())
        return True

    def flags(self, index: QModelIndex) -> Qt.ItemFlag:  # noqa: D102
        base = super().flags(index)
        return base | Qt.ItemFlag.ItemIsEditable if index.column() == 0 else base

    def headerData(  # noqa: N802, D102
        self, section: int, orientation: Qt.Orientation, role: int = Qt.ItemDataRole.DisplayRole
    ) -> Any:
        if role != Qt.ItemDataRole.DisplayRole:
            return None
        if orientation == Qt.Orientation.Vertical:
            return section + 1
        return self.heading(section)


class RegionTable(QTableView):
    """The view: whole rows are selected, names are edited by a double click."""

    def __init__(self, model: TableModel, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.setModel(model)
        self.setAccessibleName("Regions and their statistics")
        self.setSelectionBehavior(QAbstractItemView.SelectionBehavior.SelectRows)
        self.setAlternatingRowColors(True)
        self.verticalHeader().setVisible(False)
        self.verticalHeader().setDefaultSectionSize(24)
        header = self.horizontalHeader()
        header.setSectionResizeMode(QHeaderView.ResizeMode.Interactive)
        header.setResizeContentsPrecision(20)
        self.setMinimumHeight(110)

    def fit_columns(self) -> None:
        """Make columns as wide as what they hold; a refusal runs over the columns after it."""
        self.clearSpans()
        model = self.model()
        width = model.columnCount()
        for i, row in enumerate(model.rows):
            if isinstance(row.answer, NotMeasured) and width > 2:
                self.setSpan(i, 1, 1, width - 1)
        self.resizeColumnsToContents()

    def recolour(self, colours: Colours) -> None:
        """Take up the colours of a theme; Qt's palette stays light under a dark one."""
        self.setStyleSheet(
            f"QTableView {{ background: {colours.background}; color: {colours.text};"
            f" alternate-background-color: {colours.foreground}; }}"
        )

    def chosen(self) -> list[int]:
        """Return the selected rows."""
        return sorted({index.row() for index in self.selectionModel().selectedRows()})
