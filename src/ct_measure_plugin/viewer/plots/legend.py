"""Which line is which: below the plot, where it hides no curve."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import QSize, Qt
from qtpy.QtGui import QColor, QPainter, QPen, QPixmap
from qtpy.QtWidgets import QGridLayout, QLabel, QSizePolicy, QWidget

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.viewer.plots.traces import Trace
    from ct_measure_plugin.viewer.theme import Colours

__all__ = ["Legend"]

_SAMPLE = QSize(22, 12)


class Legend(QWidget):
    """A line of each look beside its words; hidden while there is only one."""

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._grid = QGridLayout(self)
        self._grid.setContentsMargins(4, 0, 4, 0)
        self._grid.setVerticalSpacing(1)
        self._grid.setColumnStretch(1, 1)
        self._rows: list[tuple[QLabel, QLabel]] = []
        self._shown: list[tuple[str, int, bool]] = []
        self._colours: Colours | None = None
        self.setAccessibleName("Legend")
        self.setVisible(False)

    def texts(self) -> list[str]:
        """Return the words, in order."""
        return [label for label, _, _ in self._shown]

    def show_traces(self, traces: Sequence[Trace]) -> None:
        """Name other curves."""
        looks = [(trace.label, trace.colour, trace.frozen) for trace in traces]
        if looks != self._shown:
            self._shown = looks
            self._write()

    def recolour(self, colours: Colours) -> None:
        """Take up the colours of a theme."""
        self._colours = colours
        self._write()

    def _write(self) -> None:
        while len(self._rows) < len(self._shown):
            row = QLabel(self), QLabel(self)
            row[1].setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Fixed)
            row[1].setTextFormat(Qt.TextFormat.PlainText)  # names of layers and regions are text
            for column, label in enumerate(row):
                self._grid.addWidget(label, len(self._rows), column)
            self._rows.append(row)
        for place, (sample, words) in enumerate(self._rows):
            used = place < len(self._shown)
            sample.setVisible(used)
            words.setVisible(used)
            if used:
                label, colour, frozen = self._shown[place]
                sample.setPixmap(self._sample(colour, frozen=frozen))
                words.setText(_short(label))
                words.setToolTip(label)
        self.setVisible(len(self._shown) > 1)

    def _sample(self, index: int, *, frozen: bool) -> QPixmap:
        lines = ("#888888",) if self._colours is None else self._colours.lines
        found = QPixmap(_SAMPLE)
        found.fill(QColor(0, 0, 0, 0))
        painter = QPainter(found)
        style = Qt.PenStyle.DashLine if frozen else Qt.PenStyle.SolidLine
        painter.setPen(QPen(QColor(lines[index % len(lines)]), 2, style))
        middle = _SAMPLE.height() // 2
        painter.drawLine(0, middle, _SAMPLE.width(), middle)
        painter.end()
        return found


def _short(label: str) -> str:
    return label if len(label) <= 40 else label[:37] + "…"
