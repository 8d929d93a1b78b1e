"""A Picture with its axes and a bar of values."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pyqtgraph as pg
from qtpy.QtCore import QRectF, Signal

from ct_measure_plugin.viewer.plots.traces import axis_text

if TYPE_CHECKING:
    from typing import Any

    from qtpy.QtWidgets import QWidget

    from ct_measure_plugin.physics.results import Picture
    from ct_measure_plugin.viewer.theme import Colours

__all__ = ["PicturePlot"]


class PicturePlot(pg.PlotWidget):
    """One Picture, rows downwards, in its own units.

    Signals
    -------
    read(text)
        What stands under the mouse, in words; "" when it leaves.
    """

    read = Signal(str)

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent, background=None)
        self._plot = self.getPlotItem()
        self.picture: Picture | None = None
        self._image = pg.ImageItem(axisOrder="row-major")
        self._plot.addItem(self._image)
        self._plot.setAspectLocked(True)
        self._plot.hideButtons()
        self._plot.invertY(True)
        for side in ("left", "bottom"):
            self._plot.getAxis(side).enableAutoSIPrefix(False)
            self._plot.getAxis(side).setStyle(maxTickLevel=0)
        self._bar = pg.ColorBarItem(
            colorMap=pg.colormap.get("viridis"), width=10, interactive=False
        )
        self._bar.setImageItem(self._image, insert_in=self._plot)
        self.setMinimumHeight(230)
        self.setAccessibleName("Picture")
        self.scene().sigMouseMoved.connect(self._on_mouse)

    def show_picture(self, picture: Picture) -> None:
        """Draw another picture; values that are no number stay empty."""
        known = self.picture
        self.picture = picture
        values = np.asarray(picture.values, float)
        finite = values[np.isfinite(values)]
        low, high = (float(finite.min()), float(finite.max())) if finite.size else (0.0, 1.0)
        high = high if high > low else low + 1.0
        self._image.setImage(values, autoLevels=False, levels=(low, high))
        self._bar.setLevels((low, high))
        self._image.setRect(_rectangle(picture))
        rows, columns = zip(picture.axis_names, picture.axis_units, strict=True)
        self._plot.getAxis("left").setLabel(axis_text(*rows))
        self._plot.getAxis("bottom").setLabel(axis_text(*columns))
        self._bar.getAxis("right").setLabel(picture.unit)
        if known is None or _rectangle(known) != _rectangle(picture):
            self._plot.autoRange(padding=0.02)

    def recolour(self, colours: Colours) -> None:
        """Take up the colours of a theme."""
        self.setBackground(colours.background)
        for axis in (*(self._plot.getAxis(s) for s in ("left", "bottom")), *self._bar_axes()):
            axis.setPen(pg.mkPen(colours.text, width=1))
            axis.setTextPen(colours.text)

    def _bar_axes(self) -> list[Any]:
        return [self._bar.getAxis(side) for side in ("left", "right")]

    def _on_mouse(self, position: Any) -> None:
        text = ""
        if self.picture is not None and self._plot.sceneBoundingRect().contains(position):
            at = self._image.mapFromScene(position)
            row, column = int(np.floor(at.y())), int(np.floor(at.x()))
            rows, columns = np.shape(self.picture.values)
            if 0 <= row < rows and 0 <= column < columns:
                where = self._plot.vb.mapSceneToView(position)
                value = float(self.picture.values[row, column])
                text = f"{where.y():.3g}, {where.x():.3g}: {value:.4g} {self.picture.unit}".strip()
        self.read.emit(text)

    def leaveEvent(self, event: Any) -> None:  # noqa: N802 - Qt's name
        """Take the words away with the mouse."""
        self.read.emit("")
        super().leaveEvent(event)


def _rectangle(picture: Picture) -> QRectF:
    """Return where the picture lies in its axes: pixel centres at origin + index × spacing."""
    rows, columns = np.shape(picture.values)
    dy, dx = picture.spacing
    y, x = picture.origin
    return QRectF(x - dx / 2, y - dy / 2, columns * dx, rows * dy)
