"""Curves with their bands, live: redrawn in a few milliseconds, in the theme's colours."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import pyqtgraph as pg
from qtpy.QtCore import Qt, Signal
from qtpy.QtGui import QColor

from ct_measure_plugin.viewer.plots.traces import Tick, Trace, axis_text, reading

if TYPE_CHECKING:
    from collections.abc import Sequence

    from qtpy.QtWidgets import QWidget

    from ct_measure_plugin.physics.results import Curve
    from ct_measure_plugin.viewer.theme import Colours

__all__ = ["CurvePlot"]

_BAND_ALPHA = 60
_WIDTH = 1.6

#: Pixels by which pyqtgraph hangs a label out of the horizontal axis, so that it is cut.
_HANGS = 5

#: Up to so many samples are marked singly: what lies between them was not measured.
_FEW = 24


class _BottomAxis(pg.AxisItem):
    """A horizontal axis whose label is seen whole."""

    def resizeEvent(self, event: Any = None) -> None:  # noqa: N802 - pyqtgraph's name
        super().resizeEvent(event)
        self.label.moveBy(0, -_HANGS)


class _Drawn:
    """The items of one trace, kept and refilled."""

    def __init__(self, plot: Any) -> None:
        # one closed outline: filling between two curves is built anew for each of them
        self.band = pg.PlotCurveItem(pen=None, fillLevel="enclosed")
        self.line = pg.PlotDataItem(connect="finite", antialias=True)
        self.bars, self.points = pg.ErrorBarItem(), pg.PlotDataItem(pen=None, symbol="o")
        for item, z in zip(self._items(), (1, 3, 4, 5), strict=True):
            item.setZValue(z)
            plot.addItem(item)

    def _items(self) -> tuple[Any, ...]:
        return self.band, self.line, self.bars, self.points

    def fill(self, trace: Trace, colour: QColor) -> None:
        alone = trace.curve if not trace.curve.joined else trace.curve.data
        self._fill_points(alone, colour, hollow=trace.frozen)
        if not trace.curve.joined:
            self.band.setData([], [])
            self.line.setData([], [])
            return
        x, y = np.asarray(trace.curve.x, float), np.asarray(trace.curve.y, float)
        style = Qt.PenStyle.DashLine if trace.frozen else Qt.PenStyle.SolidLine
        self.line.setPen(pg.mkPen(colour, width=_WIDTH, style=style))
        few = len(x) <= _FEW
        self.line.setData(x, y, symbol="o" if few else None, symbolSize=6)
        if few:
            self.line.setSymbolBrush(colour)
            self.line.setSymbolPen(None)
        doubt = trace.curve.y_uncertainty if trace.band else None
        if doubt is None:
            self.band.setData([], [])
            return
        u = np.asarray(doubt, float)
        u = np.where(np.isfinite(u), u, 0.0)
        known = np.isfinite(y)
        faint = QColor(colour)
        faint.setAlpha(_BAND_ALPHA)
        x, low, high = x[known], (y - u)[known], (y + u)[known]
        self.band.setData(
            np.concatenate([x, x[::-1]]), np.concatenate([low, high[::-1]]), brush=pg.mkBrush(faint)
        )

    def _fill_points(self, curve: Curve | None, colour: QColor, *, hollow: bool) -> None:
        """Draw samples that stand for themselves, each with its bar."""
        self.bars.setVisible(curve is not None and curve.y_uncertainty is not None)
        if curve is None:
            self.points.setData([], [])
            return
        x, y = np.asarray(curve.x, float), np.asarray(curve.y, float)
        self.points.setData(x, y, symbol="o", symbolSize=7, pen=None)
        self.points.setSymbolBrush(None if hollow else colour)
        self.points.setSymbolPen(pg.mkPen(colour, width=1))
        if curve.y_uncertainty is not None:
            u = np.nan_to_num(np.asarray(curve.y_uncertainty, float))
            self.bars.setData(x=x, y=y, top=u, bottom=u, pen=pg.mkPen(colour, width=1), beam=0.0)

    def remove_from(self, plot: Any) -> None:
        for item in self._items():
            plot.removeItem(item)


class CurvePlot(pg.PlotWidget):
    """One kind of curve, of as many answers as there are.

    Signals
    -------
    read(text)
        What stands under the mouse, in words; "" when it leaves.
    """

    read = Signal(str)

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent, background=None, axisItems={"bottom": _BottomAxis("bottom")})
        self._plot = self.getPlotItem()
        self._drawn: list[_Drawn] = []
        self._traces: tuple[Trace, ...] = ()
        self._ticks: tuple[Tick, ...] = ()
        self._tick_items: list[Any] = []
        self._colours: Colours | None = None
        self._end: float | None = None
        self._zero = pg.InfiniteLine(0.0, angle=0)
        self._zero.setZValue(-1)
        self._plot.addItem(self._zero, ignoreBounds=True)
        self._cursor = pg.InfiniteLine(angle=90)
        self._cursor.setVisible(False)
        self._plot.addItem(self._cursor, ignoreBounds=True)
        self._plot.hideButtons()
        self._plot.showGrid(x=True, y=True, alpha=0.12)
        for side in ("left", "bottom"):
            self._plot.getAxis(side).enableAutoSIPrefix(False)
        self.setMinimumHeight(190)
        self.setAccessibleName("Curves")
        self.scene().sigMouseMoved.connect(self._on_mouse)

    @property
    def traces(self) -> tuple[Trace, ...]:
        """What is drawn."""
        return self._traces

    @property
    def ticks(self) -> tuple[Tick, ...]:
        """The places marked on the horizontal axis."""
        return self._ticks

    def show_traces(
        self, traces: Sequence[Trace], ticks: Sequence[Tick] = (), end: float | None = None
    ) -> None:
        """Draw other curves; the first one's names are the axes'.

        Parameters
        ----------
        traces : sequence of Trace
            The curves.
        ticks : sequence of Tick
            Places to mark on the horizontal axis.
        end : float, optional
            How far to show the axis; the wheel shows the rest. As far as the curves go by default.
        """
        self._look_to(end)
        self._traces = tuple(traces)
        while len(self._drawn) < len(traces):
            self._drawn.append(_Drawn(self._plot))
        while len(self._drawn) > len(traces):
            self._drawn.pop().remove_from(self._plot)
        for drawn, trace in zip(self._drawn, traces, strict=True):
            drawn.fill(trace, self._colour(trace.colour))
        self._name_axes()
        self._draw_ticks(tuple(ticks))

    def recolour(self, colours: Colours) -> None:
        """Take up the colours of a theme."""
        self._colours = colours
        self.setBackground(colours.background)
        for side in ("left", "bottom"):
            axis = self._plot.getAxis(side)
            axis.setPen(pg.mkPen(colours.text, width=1))
            axis.setTextPen(colours.text)
        faint = QColor(colours.text)
        faint.setAlpha(90)
        self._zero.setPen(pg.mkPen(faint, width=1))
        self._cursor.setPen(pg.mkPen(faint, width=1, style=Qt.PenStyle.DotLine))
        ticks = self._ticks
        self._draw_ticks(())
        self.show_traces(self._traces, ticks, self._end)

    # --- inside ---------------------------------------------------------------------

    def _colour(self, index: int) -> QColor:
        if self._colours is None:
            return QColor("#888888")
        return QColor(self._colours.lines[index % len(self._colours.lines)])

    def _name_axes(self) -> None:
        if not self._traces:
            return
        curve = self._traces[0].curve
        for side, text in (
            ("bottom", axis_text(curve.x_name, curve.x_unit)),
            ("left", axis_text(curve.y_name, curve.y_unit)),
        ):
            axis = self._plot.getAxis(side)
            if axis.labelText != text:
                axis.setLabel(text)

    def _draw_ticks(self, ticks: tuple[Tick, ...]) -> None:
        if [one.label for one in ticks] != [one.label for one in self._ticks]:
            for item in self._tick_items:
                self._plot.removeItem(item)
            self._tick_items = [self._tick_item(one, place) for place, one in enumerate(ticks)]
        for item, tick in zip(self._tick_items, ticks, strict=True):
            item.label.anchors = self._anchors(tick)
            item.setValue(tick.x)
        self._ticks = ticks

    def _look_to(self, end: float | None) -> None:
        if end == self._end:
            return
        self._end = end
        if end is None:
            self._plot.enableAutoRange()
        else:
            self._plot.setXRange(0.0, end, padding=0.02)

    def _tick_item(self, tick: Tick, place: int) -> Any:
        text = "#888888" if self._colours is None else self._colours.text
        faint = QColor(text)
        faint.setAlpha(130)
        item = pg.InfiniteLine(
            tick.x,
            angle=90,
            pen=pg.mkPen(faint, width=1, style=Qt.PenStyle.DotLine),
            label=tick.label,
            labelOpts={
                "position": 0.95 - 0.09 * (place % 3),
                "color": text,
            },
        )
        self._plot.addItem(item, ignoreBounds=True)
        return item

    def _anchors(self, tick: Tick) -> list[tuple[float, float]]:
        """Put a label right of its line, or left of it where the plot ends."""
        xs = [trace.curve.x for trace in self._traces if len(trace.curve.x)]
        first, last = min(float(x[0]) for x in xs), max(float(x[-1]) for x in xs)
        last = last if self._end is None else self._end
        side = 1.0 if tick.x > first + 0.8 * (last - first) else 0.0
        return [(side, 0.5), (side, 0.5)]

    def _on_mouse(self, position: Any) -> None:
        trace = next((one for one in self._traces if len(one.curve.x)), None)
        inside = self._plot.sceneBoundingRect().contains(position)
        if trace is None or not inside:
            self._cursor.setVisible(False)
            self.read.emit("")
            return
        x = float(self._plot.vb.mapSceneToView(position).x())
        index, text = reading(trace.curve, x)
        told = trace.curve.data or trace.curve
        self._cursor.setValue(float(told.x[index]))
        self._cursor.setVisible(True)
        self.read.emit(text)

    def leaveEvent(self, event: Any) -> None:  # noqa: N802 - Qt's name
        """Take the cursor away with the mouse."""
        self._cursor.setVisible(False)
        self.read.emit("")
        super().leaveEvent(event)
