"""Regions by numbers: add and reshape them in mm, say over which slices and values they count."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

from qtpy.QtCore import QSignalBlocker
from qtpy.QtGui import QDoubleValidator
from qtpy.QtWidgets import QCheckBox, QFormLayout, QLineEdit, QWidget

from ct_measure_plugin.viewer.docks.fields import beside, button, choice, mm, whole
from ct_measure_plugin.viewer.typed_regions import KINDS, Typed, region_of, typed_of

if TYPE_CHECKING:
    from collections.abc import Callable

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.viewer.region_acts import RegionActs

    Do = Callable[[Callable[[RegionActs, list[int]], Any]], bool]

__all__ = ["RegionTyping"]

_OWN, _RANGE, _ALL = "its own slice", "a range of slices", "all slices"


class RegionTyping(QWidget):
    """Fields for a region's place, size, slices and values.

    Parameters
    ----------
    do : callable
        Given something to do with the acts and the chosen regions, does it and tells whether it
        could.
    here : callable
        Returns the z of the slice shown, mm.
    """

    def __init__(self, do: Do, here: Callable[[], float], parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._do = do
        self._here = here
        form = QFormLayout(self)
        form.setContentsMargins(0, 0, 0, 0)
        form.setFieldGrowthPolicy(QFormLayout.FieldGrowthPolicy.AllNonFixedFieldsGrow)
        self._form = form
        self._place(form)
        self._reach(form)
        self._values(form)
        self._kind_chosen()

    def _place(self, form: QFormLayout) -> None:
        self.kind = choice("Kind of region", [(text, kind) for kind, text in KINDS.items()])
        self.kind.currentIndexChanged.connect(self._kind_chosen)
        self.y, self.x = mm("Middle, y"), mm("Middle, x")
        self.height = mm("Height", 20.0, least=0.0)
        self.width = mm("Width", 20.0, least=0.0)
        self.depth = mm("Length along z", 20.0, least=0.0)
        self.angle = mm("Angle, counter-clockwise", suffix="°")
        form.addRow("Kind", self.kind)
        form.addRow("y, x, mm", beside(self.y, self.x))
        self._size = beside(self.height, self.width)
        form.addRow("Size, mm", self._size)
        form.addRow("Along z, mm", self.depth)
        form.addRow("Angle", self.angle)
        form.addRow(
            beside(
                button("Add", "Draw this region on the slice shown", self._add),
                button("Reshape", "Give the chosen region this shape and place", self._reshape),
            )
        )

    def _reach(self, form: QFormLayout) -> None:
        words: list[tuple[str, object]] = [(text, text) for text in (_OWN, _RANGE, _ALL)]
        self.over = choice("Slices that the chosen regions reach over", words)
        self.over.currentIndexChanged.connect(self._over_chosen)
        self.first = whole("First slice, counted from 0", 0, 0, 9999)
        self.last = whole("Last slice, counted from 0", 0, 0, 9999)
        self.swept = QCheckBox("an ellipsoid")
        self.swept.setToolTip("Sweep a disc or an ellipse to an ellipsoid, not to a cylinder")
        self._ends = beside(self.first, self.last)
        form.addRow("Over", beside(self.over, button("Set", "Set for the chosen", self._set_reach)))
        form.addRow("Slices", self._ends)
        form.addRow("Swept to", self.swept)
        self._over_chosen()

    def _values(self, form: QFormLayout) -> None:
        self.low, self.high = QLineEdit(), QLineEdit()
        for field, name in ((self.low, "Lowest value"), (self.high, "Highest value")):
            field.setValidator(QDoubleValidator(field))
            field.setPlaceholderText("any")
            field.setMinimumWidth(40)
            field.setAccessibleName(f"{name} that counts")
            field.setToolTip(f"{name} that counts within the chosen regions; empty for any")
        set_values = button("Set", "Set for the chosen", self._set_values)
        form.addRow("Values", beside(self.low, "to", self.high, set_values))

    # --- to be told -----------------------------------------------------------------

    def show_region(self, region: Region | None, slices: tuple[int, int] | None) -> None:
        """Fill the fields from a region that was chosen; one that cannot be typed is left out."""
        typed = typed_of(region)
        if typed is not None:
            self.show_typed(typed)
        if region is None:
            return
        spans = slices is not None
        self.over.setCurrentText(_ALL if region.z_mm is None else _RANGE if spans else _OWN)
        if slices is not None:
            self.first.setValue(slices[0])
            self.last.setValue(slices[1])
        self.swept.setChecked(region.kind == "ellipsoid")
        low, high = region.values or (-math.inf, math.inf)
        self.low.setText("" if math.isinf(low) else f"{low:g}")
        self.high.setText("" if math.isinf(high) else f"{high:g}")

    def show_typed(self, typed: Typed) -> None:
        """Fill the fields of place and size."""
        blocker = QSignalBlocker(self.kind)
        self.kind.setCurrentIndex(self.kind.findData(typed.kind))
        del blocker
        (self_y, self_x), (height, width) = typed.center_mm, typed.size_mm
        for field, value in (
            (self.y, self_y), (self.x, self_x), (self.height, height), (self.width, width),
            (self.depth, typed.depth_mm), (self.angle, typed.angle_deg),
        ):  # fmt: skip
            field.setValue(value)
        self._kind_chosen()

    def typed(self) -> Typed:
        """Return what stands in the fields of place and size."""
        return Typed(
            str(self.kind.currentData()),
            (self.y.value(), self.x.value()),
            (self.height.value(), self.width.value()),
            self.angle.value(),
            self.depth.value(),
        )

    # --- inside ---------------------------------------------------------------------

    def _kind_chosen(self, *_: Any) -> None:
        kind = self.kind.currentData()
        self.height.setVisible(kind != "disc")
        self.width.setToolTip("Diameter (mm)" if kind == "disc" else "Width (mm)")
        self.width.setAccessibleName(self.width.toolTip())
        self._form.setRowVisible(self.depth, kind == "ellipsoid")
        self._form.setRowVisible(self.angle, kind != "disc")

    def _over_chosen(self, *_: Any) -> None:
        for row in (self._ends, self.swept):
            self._form.setRowVisible(row, self.over.currentText() == _RANGE)

    def _add(self) -> None:
        self._do(lambda acts, _chosen: acts.add([region_of(self.typed(), self._here())]))

    def _reshape(self) -> None:
        self._do(
            lambda acts, chosen: acts.reshape_chosen(chosen, region_of(self.typed(), self._here()))
        )

    def _set_reach(self) -> None:
        text = self.over.currentText()
        first, last, swept = self.first.value(), self.last.value(), self.swept.isChecked()

        def act(acts: RegionActs, chosen: list[int]) -> None:
            if text == _RANGE:
                acts.reach_slices(chosen, first, last, swept=swept)
            elif text == _ALL:
                acts.reach(chosen, -math.inf, math.inf)
            else:
                acts.reach(chosen, math.nan, math.nan)

        self._do(act)

    def _set_values(self) -> None:
        low, high = (_number(field.text()) for field in (self.low, self.high))
        self._do(lambda acts, chosen: acts.count(chosen, low, high))


def _number(text: str) -> float:
    try:
        return float(text)
    except ValueError:
        return math.nan
