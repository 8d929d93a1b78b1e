"""Histogram and per-slice curves of the regions chosen in the list, live."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtWidgets import QLabel, QSizePolicy, QTabBar, QVBoxLayout, QWidget

from ct_measure_plugin.physics.results import Result, curves_of, label_of
from ct_measure_plugin.viewer.plots.curve_plot import CurvePlot
from ct_measure_plugin.viewer.plots.legend import Legend
from ct_measure_plugin.viewer.plots.traces import Trace

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.viewer.region_board import Row
    from ct_measure_plugin.viewer.theme import Colours

__all__ = ["RegionPlots"]

#: Curves drawn at once; more cannot be told apart.
MOST = 6

_HINT = "Point at it to read values."
_NOTHING = "Choose a measured region in the list to see its curves."


class RegionPlots(QWidget):
    """One tab a kind of curve that the answers hold: histogram, mean and SD along z."""

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._fields: list[str] = []
        self._rows: tuple[Row, ...] = ()
        lines = QVBoxLayout(self)
        lines.setContentsMargins(0, 0, 0, 0)
        lines.setSpacing(4)
        self.tabs = QTabBar(self)
        self.tabs.setExpanding(False)
        self.tabs.setDrawBase(False)
        self.tabs.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Fixed)
        self.tabs.setAccessibleName("Curve")
        self.tabs.currentChanged.connect(lambda _index: self._draw())
        self.plot, self.legend = CurvePlot(self), Legend(self)
        self.reading = QLabel(_NOTHING, self)
        self.reading.setWordWrap(True)
        self.reading.setAccessibleName("Value under the mouse")
        self.plot.read.connect(lambda text: self.reading.setText(text or _HINT))
        for widget in (self.tabs, self.plot, self.reading, self.legend):
            lines.addWidget(widget)
        self.show_rows(())

    @property
    def field(self) -> str:
        """The kind of curve shown: a field of the answers; "" if there is none."""
        index = self.tabs.currentIndex()
        return self._fields[index] if 0 <= index < len(self._fields) else ""

    def show_rows(self, rows: Sequence[Row]) -> None:
        """Draw the curves of other rows; differences have none."""
        self._rows = tuple(row for row in rows if row.answer and not row.difference)[:MOST]
        fields: dict[str, None] = {}
        for row in self._rows:
            if isinstance(row.answer, Result):
                fields.update(dict.fromkeys(curves_of(row.answer)))
        if self._rows and not fields:
            return  # still moving: the curves from before stay until the next ones come
        if list(fields) != self._fields:
            self._set_tabs(list(fields))
        self._draw()

    def recolour(self, colours: Colours) -> None:
        """Take up the colours of a theme."""
        self.plot.recolour(colours)
        self.legend.recolour(colours)

    def _set_tabs(self, fields: list[str]) -> None:
        kept = self.field
        self.tabs.blockSignals(True)
        while self.tabs.count():
            self.tabs.removeTab(0)
        self._fields = fields
        for name in fields:
            self.tabs.addTab(label_of(name))
        if kept in fields:
            self.tabs.setCurrentIndex(fields.index(kept))
        self.tabs.blockSignals(False)

    def _draw(self) -> None:
        traces = []
        for place, row in enumerate(self._rows):
            curve = getattr(row.answer, self.field, None) if self.field else None
            if curve is not None:
                label = f"{row.name}, {row.image}" if row.image else row.name
                traces.append(Trace(label, curve, place, band=len(self._rows) < 3))
        self.plot.setVisible(bool(traces))
        self.tabs.setVisible(bool(self._fields))
        self.plot.show_traces(traces)
        self.legend.show_traces(traces)
        if not traces:
            self.reading.setText(_NOTHING)
        elif self.reading.text() == _NOTHING:
            self.reading.setText(_HINT)
