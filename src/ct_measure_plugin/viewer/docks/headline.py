"""The numbers that a dock is opened for, large, and beneath them the rest and what to know."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from qtpy.QtCore import Qt
from qtpy.QtWidgets import QGridLayout, QHBoxLayout, QLabel, QSizePolicy, QVBoxLayout, QWidget

from ct_measure_plugin.physics.results import (
    NotMeasured,
    Quantity,
    Result,
    label_of,
    quantities_of,
)

if TYPE_CHECKING:
    from ct_measure_plugin.viewer.theme import Colours

__all__ = ["Headline", "lines_about", "number_and_doubt"]

#: How many numbers are large, and how large.
LARGE = 2
_LARGE_PT = 20


def number_and_doubt(quantity: Quantity) -> tuple[str, str]:
    """Return a number, and its uncertainty with the unit, with true minus signs.

    >>> number_and_doubt(Quantity(-0.4213, "mm⁻¹", 0.0021))
    ('−0.4213', '± 0.0021 mm⁻¹')
    """
    value, doubt = quantity.rounded()
    beside = f"± {doubt} {quantity.unit}" if doubt else quantity.unit
    return value.replace("-", "−"), beside.strip()


def lines_about(answer: Result | NotMeasured, columns: tuple[str, ...] = ()) -> list[str]:
    """Return what to know about an answer, a sentence or two each: gaps, warnings, notes.

    Parameters
    ----------
    answer : Result or NotMeasured
        What was found.
    columns : tuple of str
        Fields of the result of which is told why they are missing.
    """
    found = []
    for name in columns:
        refusal = getattr(answer, name, None)
        if isinstance(refusal, NotMeasured):
            found.append(f"{label_of(name)} not measured: {refusal.reason}. {_then(refusal)}")
    ordered = sorted(dict.fromkeys(answer.cautions), key=lambda one: one.kind.level != "warning")
    return found + [f"{one.kind.level.capitalize()}: {one}" for one in ordered]


def _then(refusal: NotMeasured) -> str:
    return f"{refusal.remedy[:1].upper()}{refusal.remedy[1:]}." if refusal.remedy else ""


class _Tile(QWidget):
    """One large number: its name, itself, and its doubt."""

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.name, self.value, self.doubt = QLabel(), QLabel(), QLabel()
        # napari's own style sheet wins over a font
        self.value.setStyleSheet(f"font-size: {_LARGE_PT}pt; padding: 0; margin: 0 0 0 2px;")
        lines = QVBoxLayout(self)
        lines.setContentsMargins(0, 0, 0, 0)
        lines.setSpacing(0)
        for label in (self.name, self.value, self.doubt):
            label.setTextFormat(Qt.TextFormat.PlainText)
            label.setTextInteractionFlags(Qt.TextInteractionFlag.TextSelectableByMouse)
            lines.addWidget(label)

    def show_field(self, name: str, found: Any) -> None:
        value, doubt = ("—", "not measured")
        if isinstance(found, Quantity):
            value, doubt = number_and_doubt(found)
        self.name.setText(label_of(name))
        self.value.setText(value)
        self.doubt.setText(doubt)
        self.setAccessibleName(f"{label_of(name)} {value} {doubt}")
        self.setToolTip(str(found))


class CautionLines(QLabel):
    """What a reader of the numbers must know, in words; hidden if there is nothing."""

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.setWordWrap(True)
        self.setTextFormat(Qt.TextFormat.PlainText)
        self.setTextInteractionFlags(Qt.TextInteractionFlag.TextSelectableByMouse)
        self.setAccessibleName("Cautions")
        self.setVisible(False)

    def show_lines(self, lines: list[str]) -> None:
        """Show other sentences, a paragraph each."""
        self.setText("\n\n".join(lines))
        self.setVisible(bool(lines))


class Headline(QWidget):
    """One answer in numbers and words.

    Attributes
    ----------
    words : QLabel
        Why nothing was measured.
    cautions : CautionLines
        What else to know; for whoever uses this to put where it fits.

    Parameters
    ----------
    columns : tuple of str
        The result's fields to show, the first :data:`LARGE` of them large.
    """

    def __init__(self, columns: tuple[str, ...] = (), parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._columns = columns
        self._all = False
        self._answer: Result | NotMeasured | None = None
        self._said = ("", "")
        lines = QVBoxLayout(self)
        lines.setContentsMargins(0, 0, 0, 0)
        lines.setSpacing(4)
        self.label = QLabel(self)
        self.label.setTextFormat(Qt.TextFormat.PlainText)
        self.label.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Fixed)
        lines.addWidget(self.label)
        self._tiles = [_Tile(self) for _ in range(LARGE)]
        self._large = QWidget(self)
        row = QGridLayout(self._large)
        row.setContentsMargins(0, 0, 0, 0)
        for place, tile in enumerate(self._tiles):
            row.addWidget(tile, 0, place)
            row.setColumnStretch(place, 1)
        lines.addWidget(self._large)
        self._rest = QWidget(self)
        self._rows = QVBoxLayout(self._rest)
        self._rows.setContentsMargins(0, 0, 0, 0)
        self._rows.setSpacing(1)
        self._cells: list[tuple[QLabel, QLabel]] = []
        lines.addWidget(self._rest)
        self.words = QLabel(self)
        self.words.setWordWrap(True)
        self.words.setTextFormat(Qt.TextFormat.PlainText)
        self.words.setTextInteractionFlags(Qt.TextInteractionFlag.TextSelectableByMouse)
        self.words.setAccessibleName("Why nothing was measured")
        self.words.setSizePolicy(QSizePolicy.Policy.Preferred, QSizePolicy.Policy.Minimum)
        lines.addWidget(self.words)
        self.cautions = CautionLines()
        self.show_answer(None)

    def set_columns(self, columns: tuple[str, ...]) -> None:
        """Show another measurement's fields."""
        self._columns = columns
        self.show_answer(None)

    def show_all(self, wanted: bool) -> None:
        """Show every number of the result, or those worth a column only."""
        self._all = wanted
        self.show_answer(self._answer, *self._said)

    def show_answer(
        self, answer: Result | NotMeasured | None, said: str = "", label: str = ""
    ) -> None:
        """Show an answer, None for none yet.

        Parameters
        ----------
        answer : Result, NotMeasured or None
            What was found.
        said : str
            What else to say, before anything about the answer.
        label : str
            Whose answer it is; "" where there is only one.
        """
        self._answer, self._said = answer, (said, label)
        self.label.setText(label)
        self.label.setToolTip(label)
        self.label.setVisible(bool(label))
        measured = answer is not None and not isinstance(answer, NotMeasured)
        fields = [name for name in self._columns if hasattr(answer, name)] if measured else []
        for place, tile in enumerate(self._tiles):
            tile.setVisible(place < len(fields))
            if place < len(fields):
                tile.show_field(fields[place], getattr(answer, fields[place]))
        self._large.setVisible(bool(fields))
        self._show_rest(answer, fields[LARGE:])
        lines = [said] if said else []
        lines += [str(answer)] if isinstance(answer, NotMeasured) else []
        self.words.setText("\n".join(lines))
        self.words.setVisible(bool(lines))
        self.cautions.show_lines([] if answer is None else lines_about(answer, tuple(fields)))

    def texts(self) -> list[str]:
        """Return the large numbers as they stand there, for programs and tests."""
        return [
            f"{one.name.text()} {one.value.text()} {one.doubt.text()}"
            for one in self._tiles
            if one.isVisibleTo(self)
        ]

    def recolour(self, colours: Colours) -> None:
        """Take up the colours of a theme."""
        for label in (self.words, self.cautions):
            label.setStyleSheet(f"color: {colours.text};")

    def _show_rest(self, answer: Any, fields: list[str]) -> None:
        shown: dict[str, Any] = {name: getattr(answer, name) for name in fields}
        if self._all and isinstance(answer, Result):
            large = set(self._columns[:LARGE])
            shown |= {k: v for k, v in quantities_of(answer).items() if k not in large}
        while len(self._cells) < len(shown):
            self._add_row()
        for cells in self._cells[len(shown) :]:
            for label in cells:
                label.hide()
        for cells, (name, found) in zip(self._cells, shown.items(), strict=False):
            cells[0].setText(label_of(name))
            cells[0].setToolTip(label_of(name))
            cells[1].setText(
                " ".join(number_and_doubt(found)) if isinstance(found, Quantity) else "not measured"
            )
            for label in cells:
                label.show()
        self._rest.setVisible(bool(shown))

    def _add_row(self) -> None:
        """Add a name, cut where it must be, and its number at the right."""
        line = QHBoxLayout()
        line.setContentsMargins(0, 0, 0, 0)
        name, number = QLabel(self._rest), QLabel(self._rest)
        name.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Preferred)
        number.setAlignment(Qt.AlignmentFlag.AlignRight)
        for label in (name, number):
            label.setTextFormat(Qt.TextFormat.PlainText)
        line.addWidget(name, 1)
        line.addWidget(number)
        self._rows.addLayout(line)
        self._cells.append((name, number))
