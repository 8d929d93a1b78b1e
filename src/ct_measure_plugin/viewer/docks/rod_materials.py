"""Which material each drawn rod is: a row a rod, chosen from the list."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import QSignalBlocker, Signal
from qtpy.QtWidgets import QComboBox, QFormLayout, QLabel, QWidget

from ct_measure_plugin.viewer.docks.dock import narrow

if TYPE_CHECKING:
    from collections.abc import Sequence

__all__ = ["RodMaterials"]

#: Rods beyond so many are named on their layer; a longer list would push the numbers away.
MOST_ROWS = 40


class RodMaterials(QWidget):
    """A choice of material for every rod.

    Signals
    -------
    named(index, material)
        A rod was said to be of a material.
    """

    named = Signal(int, str)

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._form = QFormLayout(self)
        self._form.setContentsMargins(0, 0, 0, 0)
        self._form.setVerticalSpacing(2)
        self._form.setFieldGrowthPolicy(QFormLayout.FieldGrowthPolicy.AllNonFixedFieldsGrow)
        self._boxes: list[QComboBox] = []
        self._offered: tuple[str, ...] = ()

    def show_rods(self, names: Sequence[str], known: Sequence[str], offered: Sequence[str]) -> None:
        """Show other rods.

        Parameters
        ----------
        names : sequence of str
            What the regions are called.
        known : sequence of str
            The material that each name means, "" if none.
        offered : sequence of str
            The materials to choose from.
        """
        names, known = names[:MOST_ROWS], known[:MOST_ROWS]
        if len(names) != len(self._boxes) or tuple(offered) != self._offered:
            self._rebuild(len(names), tuple(offered))
        for box, name, material in zip(self._boxes, names, known, strict=True):
            blocker = QSignalBlocker(box)
            box.setCurrentIndex(box.findText(material) if material else -1)
            box.setPlaceholderText(f"{name}: choose its material")
            box.setToolTip(name)
            del blocker

    def chosen(self) -> list[str]:
        """Return what is chosen, row by row."""
        return [box.currentText() if box.currentIndex() >= 0 else "" for box in self._boxes]

    def _rebuild(self, count: int, offered: tuple[str, ...]) -> None:
        self._offered = offered
        while self._form.rowCount():
            self._form.removeRow(0)
        self._boxes = []
        for index in range(count):
            box = QComboBox()
            narrow(box)
            box.addItems(list(offered))
            box.setCurrentIndex(-1)
            box.setAccessibleName(f"Material of rod {index + 1}")
            box.activated.connect(
                lambda _row, at=index, one=box: self.named.emit(at, one.currentText())
            )
            label = QLabel(f"Rod {index + 1}")
            label.setBuddy(box)
            self._form.addRow(label, box)
            self._boxes.append(box)
