"""Answers as curves and pictures, those kept from before beside the live ones, and a table."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any, TypeVar

from qtpy.QtCore import QSignalBlocker, Signal
from qtpy.QtWidgets import (
    QAbstractItemView,
    QHBoxLayout,
    QLabel,
    QPushButton,
    QSizePolicy,
    QTabBar,
    QVBoxLayout,
    QWidget,
)

from ct_measure_plugin.physics.results import (
    Curve,
    Picture,
    Result,
    curves_of,
    label_of,
    pictures_of,
)
from ct_measure_plugin.physics.tables import Table, tables_of
from ct_measure_plugin.viewer.docks.region_table import RegionTable, Row, TableModel
from ct_measure_plugin.viewer.docks.result_table import ResultTable
from ct_measure_plugin.viewer.pictures import can_be_layer
from ct_measure_plugin.viewer.plots.curve_plot import CurvePlot
from ct_measure_plugin.viewer.plots.legend import Legend
from ct_measure_plugin.viewer.plots.picture_plot import PicturePlot
from ct_measure_plugin.viewer.plots.traces import Trace, end_of, ticks_of

if TYPE_CHECKING:
    from ct_measure_plugin.viewer.asking import Answer
    from ct_measure_plugin.viewer.theme import Colours

__all__ = ["AnswersView"]

_HINT = "Point at it to read values."

_T = TypeVar("_T")

#: Widest the column of names becomes, pixels, so that numbers are seen beside it.
_NAME_WIDTH = 130

#: With more curves than this, only the chosen one has its band.
_BANDS = 4


class AnswersView(QWidget):
    """The answers of one measurement.

    Signals
    -------
    chosen(index)
        Another answer is the one to tell more about.
    picture_wanted(picture, name)
        Someone wants a picture as a layer.
    """

    chosen = Signal(int)
    picture_wanted = Signal(object, str)

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._live: tuple[Answer, ...] = ()
        self._frozen: list[tuple[Answer, int]] = []
        self._field = ""
        self._fields: list[str] = []
        self._at = 0
        self._columns: tuple[str, ...] = ()
        self._build()

    def _build(self) -> None:
        lines = QVBoxLayout(self)
        lines.setContentsMargins(0, 0, 0, 0)
        lines.setSpacing(4)
        self.tabs = QTabBar(self)
        self.tabs.setExpanding(False)
        self.tabs.setDrawBase(False)
        self.tabs.setUsesScrollButtons(True)
        self.tabs.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Fixed)
        self.tabs.setAccessibleName("Curve, picture or table")
        self.tabs.currentChanged.connect(self._tab_chosen)
        self.plot, self.legend, self.picture = CurvePlot(self), Legend(self), PicturePlot(self)
        self.rows = ResultTable(self)
        self.reading = QLabel(_HINT, self)
        self.reading.setAccessibleName("Value under the mouse")
        for plot in (self.plot, self.picture):
            plot.read.connect(lambda text: self.reading.setText(text or _HINT))
        for widget in (self.tabs, self.plot, self.picture, self.rows, self.reading, self.legend):
            lines.addWidget(widget)
        lines.addWidget(self._buttons())
        self.model = TableModel((), self)
        self.table = RegionTable(self.model, self)
        self.table.setAccessibleName("Answers")
        self.table.setEditTriggers(QAbstractItemView.EditTrigger.NoEditTriggers)
        self.table.selectionModel().selectionChanged.connect(self._row_chosen)
        lines.addWidget(self.table)
        self.show_answers(())

    def _buttons(self) -> QWidget:
        self._keeping = holder = QWidget(self)
        line = QHBoxLayout(holder)
        line.setContentsMargins(0, 0, 0, 0)
        self.freeze_button = QPushButton("Freeze")
        self.freeze_button.setToolTip("Keep these answers in the plot, dashed, to compare with.")
        self.freeze_button.clicked.connect(self.freeze)
        self.clear_button = QPushButton("Clear frozen")
        self.clear_button.setToolTip("Take the kept answers out of the plot.")
        self.clear_button.clicked.connect(self.clear_frozen)
        self.layer_button = QPushButton("To a layer")
        self.layer_button.setToolTip("Open the picture as an image layer.")
        self.layer_button.clicked.connect(self._want_picture)
        for button in (self.freeze_button, self.clear_button, self.layer_button):
            line.addWidget(button)
        return holder

    # --- to be told -----------------------------------------------------------------

    def set_columns(self, columns: tuple[str, ...]) -> None:
        """Turn to another measurement; nothing is shown, nothing is kept."""
        self._columns = columns
        self._frozen = []
        self.model.offer(columns)
        self.show_answers(())

    def show_answers(self, answers: tuple[Answer, ...]) -> None:
        """Show other live answers; the chosen place stays chosen."""
        self._live = answers
        self._show()

    def freeze(self) -> None:
        """Keep the live answers that were measured, dashed."""
        for answer in self._live:
            if answer.result:
                count = 1 + len(self._frozen)
                kept = replace(answer, label=f"frozen {count}: {answer.label}", marks=())
                self._frozen.append((kept, count))
        self._show()

    def clear_frozen(self) -> None:
        """Take the kept answers away."""
        self._frozen = []
        self._show()

    def recolour(self, colours: Colours) -> None:
        """Take up the colours of a theme."""
        for part in (self.plot, self.picture, self.rows, self.legend, self.table):
            part.recolour(colours)

    # --- to be asked ----------------------------------------------------------------

    def answers(self) -> tuple[Answer, ...]:
        """Return the live answers, then those kept."""
        return (*self._live, *(kept for kept, _ in self._frozen))

    def chosen_answer(self) -> Answer | None:
        """Return the answer to tell more about."""
        answers = self.answers()
        return answers[min(self._at, len(answers) - 1)] if answers else None

    def fields(self) -> list[str]:
        """Return the curves, pictures and tables that can be looked at, by name."""
        return list(self._fields)

    # --- inside ---------------------------------------------------------------------

    def _show(self) -> None:
        answers = self.answers()
        self._at = min(self._at, max(len(answers) - 1, 0))
        self._write_tabs(_fields_of(answers))
        self._draw()
        self.freeze_button.setEnabled(any(bool(one.result) for one in self._live))
        self.clear_button.setVisible(bool(self._frozen))
        rows = tuple(Row(one.label, one.result) for one in answers)
        if self.model.show(rows):
            self.table.fit_columns()
            self.table.setColumnWidth(0, min(self.table.columnWidth(0), _NAME_WIDTH))
        self.table.setVisible(len(rows) > 1)

    def _write_tabs(self, fields: list[str]) -> None:
        if fields != self._fields:
            self._fields = fields
            blocker = QSignalBlocker(self.tabs)
            while self.tabs.count():
                self.tabs.removeTab(0)
            for name in fields:
                self.tabs.addTab(label_of(name))
            if self._field in fields:
                self.tabs.setCurrentIndex(fields.index(self._field))
            del blocker
        self.tabs.setVisible(len(fields) > 1)
        self._keeping.setVisible(bool(fields))

    def _present(self) -> str:
        at = self.tabs.currentIndex()
        return self._fields[at] if 0 <= at < len(self._fields) else ""

    def _draw(self) -> None:
        name = self._present()
        found: list[tuple[Answer, Any, int, bool]] = [
            (answer, getattr(answer.result, name, None), colour, frozen)
            for answer, colour, frozen in self._looks()
        ]
        curves = [entry for entry in found if isinstance(entry[1], Curve)]
        picture, table = self._picture(), self._one_of(name, Table)
        self.plot.setVisible(bool(curves))
        if not curves:
            self.legend.show_traces([])
        self.picture.setVisible(picture is not None)
        self.rows.setVisible(table is not None)
        self.reading.setVisible(bool(curves) or picture is not None)
        self.layer_button.setVisible(picture is not None and can_be_layer(picture))
        if curves:
            few = len(curves) <= _BANDS
            traces = [
                Trace(answer.label, curve, colour, frozen, few or place == self._at)
                for place, (answer, curve, colour, frozen) in enumerate(curves)
            ]
            answer, curve = self._marked(curves)
            names = dict.fromkeys([*self._columns, "nyquist"])
            ticks = ticks_of(curve, [(n, getattr(answer.result, n, None)) for n in names])
            self.plot.show_traces(
                traces, ticks, end_of(curve, getattr(answer.result, "nyquist", None))
            )
            self.legend.show_traces(traces)
        if picture is not None:
            self.picture.show_picture(picture)
        if table is not None:
            self.rows.show_table(table)

    def _looks(self) -> list[tuple[Answer, int, bool]]:
        live = [(answer, place, False) for place, answer in enumerate(self._live)]
        return [*live, *((kept, colour, True) for kept, colour in self._frozen)]

    def _marked(self, curves: list[Any]) -> tuple[Answer, Curve]:
        """Return the answer whose numbers are marked: the chosen one if it has this curve."""
        chosen = self.chosen_answer()
        entry = next((one for one in curves if one[0] is chosen), curves[0])
        return entry[0], entry[1]

    def _picture(self) -> Picture | None:
        return self._one_of(self._present(), Picture)

    def _one_of(self, name: str, kind: type[_T]) -> _T | None:
        """Return the chosen answer's field, else that of the first answer that has it."""
        chosen = self.chosen_answer()
        answers = (*(() if chosen is None else (chosen,)), *self.answers())
        found = (_field(one.result, name) for one in answers)
        return next((one for one in found if isinstance(one, kind)), None)

    def _tab_chosen(self, *_: Any) -> None:
        self._field = self._present()
        self._draw()

    def _row_chosen(self, *_: Any) -> None:
        rows = self.table.chosen()
        if rows and rows[0] != self._at:
            self._at = rows[0]
            self._draw()
            self.chosen.emit(self._at)

    def _want_picture(self) -> None:
        picture = self._picture()
        if picture is not None:
            self.picture_wanted.emit(picture, label_of(self._present()))


def _fields_of(answers: tuple[Answer, ...]) -> list[str]:
    """Return the names of all curves, pictures and tables, as the first that has each has them.

    The chief curve, which a result names first, then the pictures, the other curves and the tables.
    """
    found: dict[str, None] = {}
    for answer in answers:
        if isinstance(answer.result, Result):
            curves = [name for name, one in curves_of(answer.result).items() if len(one.x) > 1]
            pictures, tables = pictures_of(answer.result), tables_of(answer.result)
            found |= dict.fromkeys([*curves[:1], *pictures, *curves[1:], *tables])
    return list(found)


def _field(result: Any, name: str) -> Any:
    """Return a result's curve, picture or table."""
    tables = tables_of(result) if isinstance(result, Result) else {}
    return tables.get(name, getattr(result, name, None))
