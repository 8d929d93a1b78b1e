"""A heading that folds what is under it away."""

from __future__ import annotations

from qtpy.QtWidgets import QPushButton, QVBoxLayout, QWidget

__all__ = ["Fold"]


class Fold(QWidget):
    """A heading with an arrow, closed at first; a click or the space bar opens it."""

    def __init__(self, title: str, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._title = title
        self.heading = QPushButton(self)
        self.heading.setCheckable(True)
        self.heading.setFlat(True)
        self.heading.setStyleSheet("QPushButton { text-align: left; padding: 3px; }")
        self.heading.toggled.connect(self.open)
        self._inside = QWidget(self)
        self._lines = QVBoxLayout(self._inside)
        self._lines.setContentsMargins(8, 0, 0, 0)
        outer = QVBoxLayout(self)
        outer.setContentsMargins(0, 0, 0, 0)
        outer.setSpacing(2)
        outer.addWidget(self.heading)
        outer.addWidget(self._inside)
        self.open(False)

    def add(self, widget: QWidget) -> None:
        """Put a widget under the heading."""
        self._lines.addWidget(widget)

    def open(self, wanted: bool) -> None:
        """Open or close it."""
        self.heading.setChecked(wanted)
        self.heading.setText(f"{'▾' if wanted else '▸'}  {self._title}")
        self._inside.setVisible(wanted)
