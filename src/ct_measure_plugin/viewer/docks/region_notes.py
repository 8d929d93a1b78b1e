"""What to know about the chosen region, in words: warnings below the list, the rest in a fold."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import Qt
from qtpy.QtWidgets import QLabel

from ct_measure_plugin.viewer.docks.headline import lines_about

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.results import NotMeasured, Result
    from ct_measure_plugin.viewer.theme import Colours

__all__ = ["RegionNotes"]


class RegionNotes:
    """Two texts, for whoever uses this to put where they fit.

    Attributes
    ----------
    message : QLabel
        What stands in the way, what was told, and warnings; hidden if there is nothing.
    notes : QLabel
        What else to know.
    """

    def __init__(self) -> None:
        self.message = _text("What to know about the chosen region")
        self.notes = _text("Notes about the chosen region")

    def show(self, said: Sequence[str], answer: Result | NotMeasured | None) -> None:
        """Show other sentences, and what is to be known about an answer."""
        lines, about = [line for line in said if line], []
        if answer is not None:
            lines += [] if answer else [str(answer)]
            about = lines_about(answer)
        warnings = [line for line in about if line.startswith("Warning")]
        lines += warnings
        self.message.setText("\n".join(lines))
        self.message.setVisible(bool(lines))
        self.notes.setText("\n".join(line for line in about if line not in warnings))

    def recolour(self, colours: Colours) -> None:
        """Take up the colours of a theme."""
        for label in (self.message, self.notes):
            label.setStyleSheet(f"color: {colours.text};")


def _text(name: str) -> QLabel:
    label = QLabel()
    label.setWordWrap(True)
    label.setTextFormat(Qt.TextFormat.PlainText)  # names of layers and regions are text
    label.setAccessibleName(name)
    return label
