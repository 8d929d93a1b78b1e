"""What a dock must ask about a layer that does not say it: pixel size, and what its values are."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from qtpy.QtCore import Signal
from qtpy.QtWidgets import QDoubleSpinBox, QFormLayout, QLabel, QLineEdit, QWidget

from ct_measure_plugin.viewer.layers import Asked, questions_for

if TYPE_CHECKING:
    from ct_measure_plugin.viewer.session import Session

__all__ = ["LayerQuestions"]

_AXES = (("z", "Between slices (mm)"), ("y", "Between rows (mm)"), ("x", "Between columns (mm)"))


class LayerQuestions(QWidget):
    """Fields for what a layer leaves open; hidden where it leaves nothing open."""

    answered = Signal()

    def __init__(self, session: Session, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._session = session
        self._layer: Any = None
        form = QFormLayout(self)
        form.setContentsMargins(0, 0, 0, 0)
        self._note = QLabel(
            "This layer does not say what it is. Results will state what you enter."
        )
        self._note.setWordWrap(True)
        form.addRow(self._note)
        self._steps: dict[str, QDoubleSpinBox] = {}
        for axis, label in _AXES:
            box = QDoubleSpinBox()
            box.setRange(0.0, 1000.0)
            box.setDecimals(4)
            box.setSpecialValueText("enter")
            box.setAccessibleName(label)
            box.setKeyboardTracking(False)
            box.valueChanged.connect(self._take)
            form.addRow(label, box)
            self._steps[axis] = box
        self._unit = QLineEdit("HU")
        self._unit.setAccessibleName("Unit of the values")
        self._unit.setToolTip("HU, another unit, or empty if it is not known")
        self._unit.editingFinished.connect(self._take)
        form.addRow("Values are in", self._unit)
        self._form = form

    def ask(self, layer: Any) -> None:
        """Show what a layer leaves open, with what was entered before."""
        self._layer = layer
        questions = () if layer is None else questions_for(layer)
        known = None if layer is None else self._session.asked(layer)
        spacing = (None if known is None else known.spacing_mm) or (0.0, 0.0, 0.0)
        flat = layer is not None and layer.ndim < 3
        for (axis, _), step in zip(_AXES, spacing, strict=True):
            box = self._steps[axis]
            box.blockSignals(True)
            box.setValue(1.0 if axis == "z" and flat else step)
            box.blockSignals(False)
            self._form.setRowVisible(box, "spacing" in questions and not (axis == "z" and flat))
        if known is not None:
            self._unit.setText(known.unit)
        self._form.setRowVisible(self._unit, "unit" in questions)
        self.setVisible(bool(questions))

    def _take(self, *_: Any) -> None:
        if self._layer is None:
            return
        steps = [self._steps[axis].value() for axis, _ in _AXES]
        spacing = (steps[0], steps[1], steps[2]) if all(step > 0 for step in steps) else None
        if "spacing" not in questions_for(self._layer):
            spacing = None
        self._session.answer(self._layer, Asked(spacing, self._unit.text().strip()))
        self.answered.emit()
