"""The MTF dock: from a straight edge, a round one, or a wire; drawn by hand or suggested."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, ClassVar

from qtpy.QtCore import Qt
from qtpy.QtWidgets import QLabel, QPushButton

from ct_measure_plugin.errors import CtMeasureError
from ct_measure_plugin.viewer.docks.fold import Fold
from ct_measure_plugin.viewer.docks.measurement import MeasurementDock
from ct_measure_plugin.viewer.suggestions import counted, draw_targets, reasons, search, suits
from ct_measure_plugin.viewer.tasks import run_here

if TYPE_CHECKING:
    from ct_measure_plugin.physics.targets import TargetsFound
    from ct_measure_plugin.viewer.placement import Placement

__all__ = ["MtfDock"]


class MtfDock(MeasurementDock):
    """Resolution from whatever the phantom offers."""

    title: ClassVar[str] = "MTF"
    names: ClassVar[tuple[str, ...]] = ("edge_mtf", "disc_mtf", "wire_mtf", "bar_pattern")

    _found: TargetsFound | None = None
    _place: Placement | None = None

    _layers: dict[str, Any]

    def __init__(self, viewer: napari.viewer.Viewer) -> None:  # type: ignore[name-defined] # noqa: F821
        super().__init__(viewer)

    def _build(self) -> None:
        super()._build()
        self.suggest_button = QPushButton("Suggest regions")
        self.suggest_button.setToolTip(
            "Look for edges, rods and wires on the slice shown, try them, and draw regions on those"
            " that measure well."
        )
        self.suggest_button.clicked.connect(self.suggest)
        self.suggested = _words("What was found on the slice")
        self._others_fold = Fold("Why not the others", self)
        self._others = _words("Why the others would not do")
        self._others_fold.add(self._others)
        self._others_fold.hide()
        place = self.body.indexOf(self._fold)
        for step, part in enumerate((self.suggest_button, self.suggested, self._others_fold)):
            self.body.insertWidget(place + step, part)

    def suggest(self, *_: Any) -> None:
        """Find regions on the slice shown, and draw those for the present target, or the best."""
        images = self.sources.chosen_images()
        if not images:
            self._say_found("Open an image first, or tick one.")
            return
        point = tuple(self.viewer.dims.point)
        try:
            place = self.session.placement(images[0])
            found = run_here(lambda _work: search(place, point), "Looking for edges and rods")
        except CtMeasureError as error:
            self._say_found(str(error))
            return
        self._found, self._place, self._layers = found, place, {}
        self._say_found(counted(found))
        lines = reasons(found)
        self._others.setText("\n\n".join(lines))
        self._others.show()
        self._others_fold.setVisible(bool(lines))
        offered = suits(found)
        if offered and self._measurement.name not in offered:
            self.choose_measurement(next(iter(offered)))
        else:
            self._draw_found()

    def choose_measurement(self, name: str) -> None:
        """Turn to another target; what was suggested for it is drawn."""
        super().choose_measurement(name)
        self._draw_found()

    def _draw_found(self) -> None:
        if self._found is None or self._place is None:
            return
        if self._place.layer not in self.viewer.layers:
            self._found = self._place = None
            return
        name = self._measurement.name
        layer = self._layers.get(name)
        if layer is None:
            layer = draw_targets(self.viewer, self._place, self._found, name)
        if layer is not None and layer in self.viewer.layers:
            self._layers[name] = layer  # drawn once: what people change about it stays
            self.sources.look()
            self.sources.choose(regions=layer)

    def _say_found(self, text: str) -> None:
        self.suggested.setText(text)
        self.suggested.setVisible(bool(text))


def _words(name: str) -> QLabel:
    label = QLabel()
    label.setWordWrap(True)
    label.setTextFormat(Qt.TextFormat.PlainText)
    label.setAccessibleName(name)
    label.hide()
    return label
