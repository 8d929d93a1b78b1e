"""Small controls for docks: numbers in mm, whole numbers, and lines of them with a label."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtWidgets import (
    QComboBox,
    QDoubleSpinBox,
    QHBoxLayout,
    QLabel,
    QPushButton,
    QSizePolicy,
    QSpinBox,
    QWidget,
)

from ct_measure_plugin.viewer.docks.dock import narrow

if TYPE_CHECKING:
    from collections.abc import Callable

__all__ = ["beside", "button", "choice", "mm", "whole"]

_FAR = 10_000.0


def mm(name: str, value: float = 0.0, *, least: float = -_FAR, suffix: str = "") -> QDoubleSpinBox:
    """Return a field for a length or a place in mm, with a name for those who cannot see it.

    Two in a line leave no room for a unit in each: their label says it.
    """
    box = QDoubleSpinBox()
    box.setRange(least, _FAR)
    box.setDecimals(2)
    box.setSingleStep(1.0)
    box.setSuffix(suffix)
    box.setValue(value)
    box.setKeyboardTracking(False)
    name = name if suffix else f"{name} (mm)"
    box.setAccessibleName(name)
    box.setToolTip(name)
    _may_shrink(box)
    return box


def whole(name: str, value: int, low: int, high: int) -> QSpinBox:
    """Return a field for a whole number."""
    box = QSpinBox()
    box.setRange(low, high)
    box.setValue(value)
    box.setKeyboardTracking(False)
    box.setAccessibleName(name)
    box.setToolTip(name)
    _may_shrink(box)
    return box


def choice(name: str, words: list[tuple[str, object]]) -> QComboBox:
    """Return a choice between words, each with the value it stands for."""
    box = QComboBox()
    narrow(box)
    for text, value in words:
        box.addItem(text, value)
    box.setAccessibleName(name)
    box.setToolTip(name)
    return box


def button(text: str, tip: str, act: Callable[[], object]) -> QPushButton:
    """Return a button."""
    made = QPushButton(text)
    made.setToolTip(tip)
    made.clicked.connect(lambda _checked=False: act())
    return made


def beside(*parts: QWidget | str) -> QWidget:
    """Return controls in a line; a text becomes a label."""
    holder = QWidget()
    line = QHBoxLayout(holder)
    line.setContentsMargins(0, 0, 0, 0)
    line.setSpacing(4)
    for part in parts:
        widget = QLabel(part) if isinstance(part, str) else part
        stretch = 0 if isinstance(widget, QLabel | QPushButton) else 1
        line.addWidget(widget, stretch)
    return holder


def _may_shrink(box: QWidget) -> None:
    box.setStyleSheet("min-width: 44px;")  # napari's style asks for more than two in a line have
    box.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Fixed)
