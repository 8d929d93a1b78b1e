"""A line that says that something is being measured, with a way to stop it."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import QTimer
from qtpy.QtWidgets import QHBoxLayout, QLabel, QProgressBar, QPushButton, QWidget

if TYPE_CHECKING:
    from ct_measure_plugin.viewer.following import Following

__all__ = ["BusyLine"]

#: Milliseconds before it shows: what is done sooner needs no word.
_AFTER = 400


class BusyLine(QWidget):
    """Shown while work takes longer than a moment."""

    def __init__(self, following: Following, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        line = QHBoxLayout(self)
        line.setContentsMargins(0, 0, 0, 0)
        line.addWidget(QLabel("Measuring…"))
        bar = QProgressBar()
        bar.setRange(0, 0)
        bar.setTextVisible(False)
        bar.setFixedHeight(6)
        bar.setAccessibleName("Measuring")
        line.addWidget(bar, 1)
        self.stop_button = QPushButton("Stop")
        self.stop_button.setToolTip("Drop this answer; the next change measures again.")
        self.stop_button.clicked.connect(following.cancel)
        line.addWidget(self.stop_button)
        self._timer = QTimer(self)
        self._timer.setSingleShot(True)
        self._timer.setInterval(_AFTER)
        self._timer.timeout.connect(self.show)
        following.busy_changed.connect(self._follow)
        self.hide()

    def _follow(self, busy: bool) -> None:
        if busy:
            self._timer.start()
        else:
            self._timer.stop()
            self.hide()
