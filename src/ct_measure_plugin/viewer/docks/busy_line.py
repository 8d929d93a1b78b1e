"""A line that says that something is being measured, with a way to stop it."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import QTimer
from qtpy.QtWidgets import QHBoxLayout, QLabel, QProgressBar, QPushButton, QWidget

if TYPE_CHECKING:
    from collections.abc import Callable

    from ct_measure_plugin.viewer.following import Following

__all__ = ["BusyLine"]

#: Milliseconds before it shows: what is done sooner needs no word.
_AFTER = 400

_WORDS = "Measuring…"


class BusyLine(QWidget):
    """Shown while work takes longer than a moment; how far it is, where it says so.

    Parameters
    ----------
    following : Following
        What runs.
    stop : callable, optional
        What the button does; it stops what runs by default.
    """

    def __init__(
        self,
        following: Following,
        parent: QWidget | None = None,
        stop: Callable[[], None] | None = None,
    ) -> None:
        super().__init__(parent)
        line = QHBoxLayout(self)
        line.setContentsMargins(0, 0, 0, 0)
        self.words = QLabel(_WORDS)
        line.addWidget(self.words)
        self.bar = QProgressBar()
        self.bar.setRange(0, 0)
        self.bar.setTextVisible(False)
        self.bar.setFixedHeight(6)
        self.bar.setAccessibleName("Measuring")
        line.addWidget(self.bar, 1)
        self.stop_button = QPushButton("Stop")
        self.stop_button.setToolTip("Drop this answer; the next change measures again.")
        self.stop_button.clicked.connect(stop or following.cancel)
        line.addWidget(self.stop_button)
        self._timer = QTimer(self)
        self._timer.setSingleShot(True)
        self._timer.setInterval(_AFTER)
        self._timer.timeout.connect(self.show)
        following.busy_changed.connect(self._follow)
        following.progressed.connect(self._count)
        self.hide()

    def _follow(self, busy: bool) -> None:
        if busy:
            self._timer.start()
            self.bar.setRange(0, 0)
            self.words.setText(_WORDS)
        else:
            self._timer.stop()
            self.hide()

    def _count(self, done: int, total: int) -> None:
        self.bar.setRange(0, total)
        self.bar.setValue(done)
        self.words.setText(f"Measured {done} of {total}")
