"""Move, mirror, array and copy the chosen regions."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from qtpy.QtCore import QSignalBlocker
from qtpy.QtWidgets import QCheckBox, QFormLayout, QWidget

from ct_measure_plugin.viewer.docks.fields import beside, button, choice, mm, whole

if TYPE_CHECKING:
    from collections.abc import Callable

    from ct_measure_plugin.viewer.region_acts import RegionActs
    from ct_measure_plugin.viewer.session import Session

    Do = Callable[[Callable[[RegionActs, list[int]], Any]], bool]

__all__ = ["RegionArranging"]

_NEW = "a new layer"


class RegionArranging(QWidget):
    """Fields and buttons; each works on the regions chosen in the list.

    Parameters
    ----------
    do : callable
        Given something to do with the acts and the chosen regions, does it and tells whether it
        could.
    session : Session
        The viewer's session.
    """

    def __init__(self, do: Do, session: Session, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._do = do
        self._session = session
        self._layers: list[Any] = []
        self._labels: list[Any] = []
        form = QFormLayout(self)
        form.setContentsMargins(0, 0, 0, 0)
        form.setFieldGrowthPolicy(QFormLayout.FieldGrowthPolicy.AllNonFixedFieldsGrow)
        self._moving(form)
        self._repeating(form)
        self._copying(form)

    def _moving(self, form: QFormLayout) -> None:
        self.by_y, self.by_x = mm("Down by"), mm("Right by")
        form.addRow("y, x, mm", beside(self.by_y, self.by_x))
        form.addRow("", button("Move", "Move the chosen regions", self._move))
        self.across = choice(
            "Direction", [("left ↔ right", "vertical"), ("up ↔ down", "horizontal")]
        )
        self.about = choice("About", [("image's middle", "image"), ("their middle", "regions")])
        self.keep = QCheckBox("Keep originals")
        self.keep.setChecked(True)
        form.addRow("Mirror", self.across)
        form.addRow("about", self.about)
        form.addRow("", self.keep)
        form.addRow("", button("Mirror", "Mirror the chosen regions", self._mirror))

    def _repeating(self, form: QFormLayout) -> None:
        self.rows = whole("Rows", 2, 1, 200)
        self.columns = whole("Columns", 2, 1, 200)
        self.step_y, self.step_x = mm("From row to row", 30.0), mm("From column to column", 30.0)
        form.addRow("Array", beside(self.rows, self.columns))
        form.addRow("Steps, mm", beside(self.step_y, self.step_x))
        make = "Copy the chosen regions to rows and columns"
        form.addRow("", button("Array", make, self._array))
        self.places = whole("Places in the ring", 8, 2, 200)
        self.ring_y, self.ring_x = mm("Ring's middle, y"), mm("Ring's middle, x")
        self.turned = QCheckBox("Turn them")
        self.turned.setToolTip("Turn each copy with its place in the ring")
        self.turned.setChecked(True)
        middle = button("Image's middle", "Take the image's middle", self.take_middle)
        form.addRow("Ring of", self.places)
        form.addRow("", self.turned)
        form.addRow("About, mm", beside(self.ring_y, self.ring_x))
        form.addRow("", middle)
        form.addRow("", button("Ring", "Copy the chosen regions to a ring", self._ring))

    def _copying(self, form: QFormLayout) -> None:
        self.first = whole("From slice, counted from 0", 0, 0, 9999)
        self.last = whole("To slice, counted from 0", 0, 0, 9999)
        form.addRow("To slices", beside(self.first, self.last))
        copy = "Copy the chosen regions to the slices from the first to the last"
        form.addRow("", button("Copy to slices", copy, self._to_slices))
        self.layer = choice("Layer to copy to", [])
        form.addRow(
            "To layer",
            beside(self.layer, button("Copy", "Copy to the layer", self._to_layer)),
        )
        self.labels = choice("Layer to paint on", [])
        form.addRow(
            "As labels",
            beside(self.labels, button("Paint", "Paint the regions as labels", self._to_labels)),
        )
        self.look()

    # --- to be told -----------------------------------------------------------------

    def look(self) -> None:
        """Look at the viewer's layers again."""
        from napari.layers import Labels, Points, Shapes

        viewer = self._session.viewer
        layers = [] if viewer is None else list(reversed(viewer.layers))
        self._layers = [one for one in layers if isinstance(one, Shapes | Points)]
        self._labels = [one for one in layers if isinstance(one, Labels)]
        for box, names in (
            (self.layer, [one.name for one in self._layers]),
            (self.labels, [_NEW, *(one.name for one in self._labels)]),
        ):
            known, blocker = box.currentText(), QSignalBlocker(box)
            box.clear()
            box.addItems(names)
            box.setCurrentIndex(max(box.findText(known), 0) if names else -1)
            del blocker

    # --- inside ---------------------------------------------------------------------

    def _move(self) -> None:
        by = self.by_y.value(), self.by_x.value()
        self._do(lambda acts, chosen: acts.shift(chosen, by))

    def _mirror(self) -> None:
        across, about = self.across.currentData(), self.about.currentData()
        keep = self.keep.isChecked()
        self._do(lambda acts, chosen: acts.mirror(chosen, across, about, keep=keep))

    def _array(self) -> None:
        rows, columns = self.rows.value(), self.columns.value()
        step = self.step_y.value(), self.step_x.value()
        self._do(lambda acts, chosen: acts.array(chosen, rows, columns, step))

    def _ring(self) -> None:
        places, turned = self.places.value(), self.turned.isChecked()
        about = self.ring_y.value(), self.ring_x.value()
        self._do(lambda acts, chosen: acts.ring(chosen, places, about, turned=turned))

    def take_middle(self) -> None:
        """Put the image's middle into the ring's fields."""

        def act(acts: RegionActs, _chosen: list[int]) -> None:
            y, x = acts.middle()
            self.ring_y.setValue(y)
            self.ring_x.setValue(x)

        self._do(act)

    def _to_slices(self) -> None:
        first, last = self.first.value(), self.last.value()
        self._do(lambda acts, chosen: acts.to_slices(chosen, first, last))

    def _to_layer(self) -> None:
        index = self.layer.currentIndex()
        if 0 <= index < len(self._layers):
            layer = self._layers[index]
            self._do(lambda acts, chosen: acts.to_layer(chosen, layer))

    def _to_labels(self) -> None:
        index = self.labels.currentIndex() - 1
        layer = self._labels[index] if 0 <= index < len(self._labels) else None
        self._do(lambda acts, chosen: acts.to_labels(chosen, layer))
