"""A heading that folds what is under it away."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtWidgets import QPushButton, QSizePolicy, QVBoxLayout, QWidget

if TYPE_CHECKING:
    from collections.abc import Mapping

__all__ = ["Fold", "folded"]


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


def folded(parts: Mapping[str, QWidget], parent: QWidget) -> list[Fold]:
    """Return a closed fold for each part, as high as what is in it, wrapped lines too."""
    found = []
    for title, part in parts.items():
        fold = Fold(title, parent)
        fold.add(part)
        fold.setSizePolicy(QSizePolicy.Policy.Preferred, QSizePolicy.Policy.Minimum)
        found.append(fold)
    return found
