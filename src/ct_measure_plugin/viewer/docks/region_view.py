"""The view of the list of regions: selects whole regions, sorts, edits, copies."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from qtpy.QtCore import QItemSelection, QItemSelectionModel, QSortFilterProxyModel, Qt, Signal
from qtpy.QtGui import QKeySequence
from qtpy.QtWidgets import (
    QAbstractItemView,
    QApplication,
    QHeaderView,
    QMenu,
    QTableView,
)

from ct_measure_plugin.physics.results import label_of

if TYPE_CHECKING:
    from collections.abc import Collection

    from qtpy.QtCore import QPoint
    from qtpy.QtGui import QKeyEvent
    from qtpy.QtWidgets import QWidget

    from ct_measure_plugin.viewer.docks.region_list import RegionListModel
    from ct_measure_plugin.viewer.theme import Colours

__all__ = ["RegionView"]

#: Widest a name's or a class's column becomes, pixels, so that numbers are seen beside it.
_WIDEST = 120


class _Sorted(QSortFilterProxyModel):
    """Rows in the order of a column, numbers as numbers; in the layer's own order otherwise."""

    def lessThan(self, left: Any, right: Any) -> bool:  # noqa: N802 - Qt's name
        one, two = (index.data(Qt.ItemDataRole.UserRole) for index in (left, right))
        numbers = isinstance(one, float), isinstance(two, float)
        if all(numbers):
            return bool(one < two)
        return numbers[0] if any(numbers) else str(one).casefold() < str(two).casefold()


class RegionView(QTableView):
    """Regions and what was found in them.

    Signals
    -------
    chosen_changed()
        Other regions are selected in the list, by whoever uses it.
    delete_asked()
        Someone pressed Delete.
    """

    chosen_changed = Signal()
    delete_asked = Signal()

    def __init__(self, model: RegionListModel, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._list = model
        self._quiet = False
        self._proxy = _Sorted(self)
        self._proxy.setDynamicSortFilter(False)
        self._proxy.setSourceModel(model)
        self.setModel(self._proxy)
        self.setAccessibleName("Regions and their statistics")
        self.setSelectionBehavior(QAbstractItemView.SelectionBehavior.SelectRows)
        self.setEditTriggers(
            QAbstractItemView.EditTrigger.DoubleClicked
            | QAbstractItemView.EditTrigger.EditKeyPressed
        )
        self.setAlternatingRowColors(True)
        self.setWordWrap(False)
        self.verticalHeader().setVisible(False)
        self.verticalHeader().setDefaultSectionSize(24)
        header = self.horizontalHeader()
        header.setSectionResizeMode(QHeaderView.ResizeMode.Interactive)
        header.setResizeContentsPrecision(20)
        header.setSortIndicator(-1, Qt.SortOrder.AscendingOrder)
        header.setSortIndicatorClearable(True)
        header.setContextMenuPolicy(Qt.ContextMenuPolicy.CustomContextMenu)
        header.customContextMenuRequested.connect(
            lambda at: self.offer_columns(header.mapToGlobal(at))
        )
        self.setSortingEnabled(True)
        header.sortIndicatorChanged.connect(lambda *_: self._span_refusals())
        model.refusals_changed.connect(self._span_refusals)
        self.setMinimumHeight(120)
        self.selectionModel().selectionChanged.connect(self._selection_changed)

    # --- what is shown --------------------------------------------------------------

    def fit_columns(self) -> None:
        """Make columns as wide as what they hold."""
        self.resizeColumnsToContents()
        for column, name in enumerate(self._list.columns):
            if name not in self._list.offered:
                self.setColumnWidth(column, min(self.columnWidth(column), _WIDEST))

    def _span_refusals(self) -> None:
        """Let the reason why a region was not measured run over the columns after it."""
        self.clearSpans()
        lead, width = self._list.lead, self._list.numbers
        if width < 2:
            return
        for i, row in enumerate(self._list.rows):
            if row.complete and not row.answer:
                at = self._proxy.mapFromSource(self._list.index(i, 0)).row()
                self.setSpan(at, lead, 1, width)

    def recolour(self, colours: Colours) -> None:
        """Take up the colours of a theme; Qt's palette stays light under a dark one."""
        self._list.recolour(colours)
        self.setStyleSheet(
            f"QTableView {{ background: {colours.background}; color: {colours.text};"
            f" alternate-background-color: {colours.foreground}; }}"
        )

    # --- what is chosen -------------------------------------------------------------

    def chosen_rows(self) -> list[int]:
        """Return the selected rows of the list."""
        found = (self._proxy.mapToSource(one) for one in self.selectionModel().selectedRows())
        return sorted({index.row() for index in found})

    def chosen(self) -> list[int]:
        """Return the indices of the selected regions."""
        rows = self._list.rows
        return list(dict.fromkeys(rows[i].index for i in self.chosen_rows() if i < len(rows)))

    def choose(self, indices: Collection[int]) -> None:
        """Select regions, without telling that they were chosen here."""
        wanted = set(indices)
        if wanted == set(self.chosen()):
            return
        self._quiet = True
        try:
            picked = QItemSelection()
            first = None
            for i, row in enumerate(self._list.rows):
                if row.index in wanted and not row.difference:
                    at = self._proxy.mapFromSource(self._list.index(i, 0))
                    picked.select(at, at)
                    first = at if first is None else first
            how = QItemSelectionModel.SelectionFlag
            self.selectionModel().select(picked, how.ClearAndSelect | how.Rows)
            if first is not None:
                self.scrollTo(first)
        finally:
            self._quiet = False

    def in_sight(self) -> set[int]:
        """Return the indices of the regions whose rows can be seen without scrolling."""
        top, bottom = self.rowAt(0), self.rowAt(self.viewport().height() - 1)
        if top < 0:
            return set()
        last = self._proxy.rowCount() - 1 if bottom < 0 else bottom
        rows = self._list.rows
        seen = (
            self._proxy.mapToSource(self._proxy.index(i, 0)).row() for i in range(top, last + 1)
        )
        return {rows[i].index for i in seen if 0 <= i < len(rows)}

    def _selection_changed(self, *_: Any) -> None:
        if not self._quiet:
            self.chosen_changed.emit()

    # --- keys and menus -------------------------------------------------------------

    def copy(self) -> None:
        """Copy the selected rows, or all of them if none or one is, to the clipboard."""
        rows = self.chosen_rows()
        QApplication.clipboard().setText(self._list.as_text(rows if len(rows) > 1 else None))

    def keyPressEvent(self, event: QKeyEvent) -> None:  # noqa: N802
        """Copy with Ctrl+C, delete with Delete."""
        if event.matches(QKeySequence.StandardKey.Copy):
            self.copy()
        elif event.matches(QKeySequence.StandardKey.Delete):
            self.delete_asked.emit()
        else:
            super().keyPressEvent(event)
            return
        event.accept()

    def columns_menu(self) -> QMenu:
        """Return a menu of the columns, each ticked while it is shown."""
        menu = QMenu("Columns", self)
        code = menu.addAction("Code")
        code.setCheckable(True)
        code.setChecked(self._list.codes)
        code.toggled.connect(lambda on: self._want(self._list.wanted, codes=on))
        menu.addSeparator()
        for name in self._list.offered:
            action = menu.addAction(label_of(name))
            action.setCheckable(True)
            action.setChecked(name in self._list.wanted)
            action.toggled.connect(lambda on, one=name: self._toggle(one, on=on))
        return menu

    def _toggle(self, name: str, *, on: bool) -> None:
        wanted = [one for one in self._list.wanted if one != name] + ([name] if on else [])
        ordered = tuple(one for one in self._list.offered if one in wanted)
        self._want(ordered or self._list.wanted[:1], codes=self._list.codes)

    def _want(self, columns: tuple[str, ...], *, codes: bool) -> None:
        chosen = self.chosen()
        self._list.want(columns, codes=codes)
        self.choose(chosen)
        self.fit_columns()

    def offer_columns(self, at: QPoint) -> None:
        """Open the menu of the columns at a place of the screen."""
        menu = self.columns_menu()
        menu.setAttribute(Qt.WidgetAttribute.WA_DeleteOnClose)
        menu.popup(at)
