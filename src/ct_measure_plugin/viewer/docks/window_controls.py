"""Centre, width and function of a window: spin boxes with sliders beside them."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import QSignalBlocker, Qt, Signal
from qtpy.QtWidgets import QComboBox, QDoubleSpinBox, QFormLayout, QHBoxLayout, QSlider, QWidget

from ct_measure_plugin.physics.windowing import FUNCTIONS

if TYPE_CHECKING:
    from ct_measure_plugin.physics.windowing import WindowFunction

__all__ = ["FUNCTION_NAMES", "WindowControls", "number"]

#: DICOM's terms, in words.
FUNCTION_NAMES: dict[WindowFunction, str] = {
    "LINEAR": "Linear",
    "LINEAR_EXACT": "Linear, exact",
    "SIGMOID": "Sigmoid",
}

_FUNCTION_TIPS = {
    "LINEAR": "DICOM LINEAR: black at centre − width/2, white at centre + width/2 − 1.",
    "LINEAR_EXACT": "DICOM LINEAR_EXACT: black at centre − width/2, white at centre + width/2.",
    "SIGMOID": "DICOM SIGMOID: an S-shaped curve, drawn through the layer's colour map.",
}

#: The sliders' reach: the scale of 12 bits, and widths in eighths of an octave up to 2 ** 13.
_LOWEST, _HIGHEST = -1024, 3071
_EIGHTHS = 13 * 8
_FAR = 1e6


class WindowControls(QWidget):
    """Centre, width and function.

    Signals
    -------
    edited(centre, width, function)
        The user changed something; not sent when :meth:`show_window` does.
    """

    edited = Signal(float, float, str)

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.centre = _spin("Window centre", -_FAR, _FAR, "Middle of the grey scale.")
        self.width_box = _spin("Window width", 0.01, _FAR, "Distance from black to white.")
        self._centre_slider = _slider("Window centre, slider", _LOWEST, _HIGHEST)
        self._width_slider = _slider("Window width, slider", 0, _EIGHTHS)
        self.function = QComboBox(self)
        self.function.setAccessibleName("Window function")
        for index, key in enumerate(FUNCTIONS):
            self.function.addItem(FUNCTION_NAMES[key], key)
            self.function.setItemData(index, _FUNCTION_TIPS[key], Qt.ItemDataRole.ToolTipRole)
        self._lay_out()
        self.centre.valueChanged.connect(self._edit)
        self.width_box.valueChanged.connect(self._edit)
        self.function.currentIndexChanged.connect(self._edit)
        self._centre_slider.valueChanged.connect(self.centre.setValue)
        self._width_slider.valueChanged.connect(lambda step: self.width_box.setValue(_width(step)))

    def _lay_out(self) -> None:
        form = QFormLayout(self)
        form.setContentsMargins(0, 0, 0, 0)
        form.setFieldGrowthPolicy(QFormLayout.FieldGrowthPolicy.AllNonFixedFieldsGrow)
        form.addRow("&Centre", _beside(self.centre, self._centre_slider))
        form.addRow("&Width", _beside(self.width_box, self._width_slider))
        form.addRow("&Function", self.function)
        for field, box in ((0, self.centre), (1, self.width_box)):
            label = form.itemAt(field, QFormLayout.ItemRole.LabelRole).widget()
            label.setBuddy(box)

    def present(self) -> tuple[float, float, WindowFunction]:
        """Return centre, width and function as they stand."""
        return self.centre.value(), self.width_box.value(), self.function.currentData()

    def show_window(self, centre: float, width: float, function: str, unit: str) -> None:
        """Show a window that was set elsewhere; nothing is sent."""
        boxes = (self.centre, self.width_box, self.function)
        blockers = [QSignalBlocker(box) for box in boxes]
        for box in (self.centre, self.width_box):
            box.setSuffix(f" {unit}" if unit else "")
        self.width_box.setMinimum(1.0 if function == "LINEAR" else 0.01)
        if not self.centre.hasFocus() or abs(self.centre.value() - centre) > 0.005:
            self.centre.setValue(centre)
        if not self.width_box.hasFocus() or abs(self.width_box.value() - width) > 0.005:
            self.width_box.setValue(width)
        self.function.setCurrentIndex(self.function.findData(function))
        self._move_sliders(centre, width)
        del blockers

    def _edit(self, *_: object) -> None:
        centre, width, function = self.present()
        if function == "LINEAR" and width < 1:
            width = 1.0
        self.edited.emit(centre, width, function)

    def _move_sliders(self, centre: float, width: float) -> None:
        for slider, value in ((self._centre_slider, round(centre)), (self._width_slider, None)):
            blocker = QSignalBlocker(slider)
            slider.setValue(_step(width) if value is None else value)
            del blocker


def number(value: float) -> str:
    """Return a number as it is printed, with a true minus sign."""
    return f"{value:.6g}".replace("-", "−")


def _spin(name: str, low: float, high: float, tip: str) -> QDoubleSpinBox:
    box = QDoubleSpinBox()
    box.setRange(low, high)
    box.setDecimals(1)
    box.setSingleStep(5.0)
    box.setKeyboardTracking(False)
    box.setAccessibleName(name)
    box.setToolTip(tip)
    box.setFixedWidth(104)
    return box


def _slider(name: str, low: int, high: int) -> QSlider:
    slider = QSlider(Qt.Orientation.Horizontal)
    slider.setRange(low, high)
    slider.setAccessibleName(name)
    slider.setMinimumWidth(60)
    return slider


def _beside(box: QWidget, slider: QWidget) -> QWidget:
    row = QWidget()
    layout = QHBoxLayout(row)
    layout.setContentsMargins(0, 0, 0, 0)
    layout.addWidget(box)
    layout.addWidget(slider, 1)
    return row


def _width(step: int) -> float:
    """Return the width at a slider's step: eight steps double it."""
    return float(round(2.0 ** (step / 8)))


def _step(width: float) -> int:
    """Return the slider's step nearest to a width, by looking along its scale."""
    return min(range(_EIGHTHS + 1), key=lambda step: abs(_width(step) - width))
