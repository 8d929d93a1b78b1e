"""The dock of the CT-number scale: rods found or named, the line, and a layer of μ."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, ClassVar

from qtpy.QtWidgets import QFileDialog, QHBoxLayout, QLabel, QPushButton, QWidget

from ct_measure_plugin.errors import CtMeasureError
from ct_measure_plugin.measurements.rod_layouts import FoundRods, load_layout
from ct_measure_plugin.physics.ct_number_line import CtNumberLine
from ct_measure_plugin.viewer.docks.fold import Fold
from ct_measure_plugin.viewer.docks.measurement import MeasurementDock
from ct_measure_plugin.viewer.docks.rod_materials import RodMaterials
from ct_measure_plugin.viewer.rods import add_mu_layer, draw_rods, known_as, search, told
from ct_measure_plugin.viewer.shapes import names_on, rename
from ct_measure_plugin.viewer.tasks import run_here

if TYPE_CHECKING:
    from ct_measure_plugin.viewer.asking import Answer

__all__ = ["CtNumberLineDock"]

_LAYOUTS = "Layout (*.yaml *.yml *.json)"


class CtNumberLineDock(MeasurementDock):
    """The CT-number scale, live."""

    title: ClassVar[str] = "CT-number scale"
    names: ClassVar[tuple[str, ...]] = ("ct_number_line",)

    def __init__(self, viewer: napari.viewer.Viewer) -> None:  # type: ignore[name-defined] # noqa: F821
        super().__init__(viewer)

    # --- building -------------------------------------------------------------------

    def _build(self) -> None:
        super()._build()
        self._rods_fold = Fold("Materials of the rods", self)
        self.materials = RodMaterials(self)
        self.materials.named.connect(self._name)
        self._rods_fold.add(self.materials)
        self.found = QLabel(self)
        self.found.setWordWrap(True)
        self.found.setAccessibleName("What was found by the layout")
        self.found.hide()
        place = self.body.indexOf(self._fold)
        for step, part in enumerate((self._buttons(), self.found, self._rods_fold)):
            self.body.insertWidget(place + step, part)

    def _buttons(self) -> QWidget:
        holder = QWidget(self)
        line = QHBoxLayout(holder)
        line.setContentsMargins(0, 0, 0, 0)
        self.find_button = QPushButton("Find rods…")
        self.find_button.setToolTip(
            "Find the rods of a layout on the slice shown, however the phantom is turned, and draw"
            " a region inside each."
        )
        self.find_button.clicked.connect(self._choose_layout)
        self.mu_button = QPushButton("Layer of μ")
        self.mu_button.setToolTip(
            "Open the image as attenuation in cm⁻¹ at the effective energy found here."
        )
        self.mu_button.clicked.connect(self.open_mu)
        self.mu_button.setEnabled(False)
        for button in (self.find_button, self.mu_button):
            line.addWidget(button)
        return holder

    # --- rods -----------------------------------------------------------------------

    def _regions_layer(self) -> Any:
        """Return no layer where a layout finds the rods: it and regions exclude each other."""
        return None if self._settings().layout is not None else super()._regions_layer()

    def _settings(self) -> Any:
        return self.form.settings

    def refresh(self) -> None:
        """Show the rods' materials, and ask."""
        layer = self._regions_layer()
        names = [] if layer is None else names_on(layer)
        listed = self._settings().listed
        known = [known_as(name, listed) for name in names]
        self.materials.show_rods(names, known, [entry.name for entry in listed])
        self._rods_fold.setVisible(bool(names) and not self._settings().rods)
        unknown = known.count("")
        if unknown > self._unknown:
            self._rods_fold.open(True)
        self._unknown = unknown
        super().refresh()

    _unknown = 0

    def _name(self, index: int, material: str) -> None:
        layer = self._regions_layer()
        if layer is not None and index < layer.nshapes:
            rename(layer, index, material)
            self.kick()

    def _choose_layout(self) -> None:
        path, _ = QFileDialog.getOpenFileName(self, "Layout of the rods", "", _LAYOUTS)
        if path:
            self.find_rods(path)

    def find_rods(self, path: str) -> None:
        """Find the rods of a layout's file on the slice shown, and draw them."""
        images = self.sources.chosen_images()
        if not images:
            self._say_found("Open an image first, or tick one.")
            return
        settings = self._settings()
        try:
            placement = self.session.placement(images[0])
            layout, point = load_layout(path), tuple(self.viewer.dims.point)
            found = run_here(
                lambda _work: search(
                    placement, point, layout, settings.listed, settings.layout_slices
                ),
                "Finding rods",
            )
        except CtMeasureError as error:
            self._say_found(str(error))
            return
        self._say_found(told(found))
        if isinstance(found, FoundRods):
            layer = draw_rods(self.viewer, placement, found)
            self.sources.look()
            self.sources.choose(regions=layer)

    def _say_found(self, text: str) -> None:
        self.found.setText(text)
        self.found.setVisible(bool(text))

    # --- μ --------------------------------------------------------------------------

    def _show(self, answers: tuple[Answer, ...]) -> None:
        super()._show(answers)
        self.mu_button.setEnabled(self._line() is not None)

    def _line(self) -> tuple[CtNumberLine, int] | None:
        """Return the line to tell more about, and of which image it is."""
        chosen = self.answers.chosen_answer()
        if chosen is None or not isinstance(chosen.result, CtNumberLine):
            return None
        return chosen.result, chosen.layer

    def open_mu(self) -> Any:
        """Open the measured image as μ at its effective energy; return the layer."""
        found, images = self._line(), self.sources.chosen_images()
        if found is None or found[1] >= len(images):
            return None
        line, place = found
        return add_mu_layer(
            self.viewer, self.session.placement(images[place]), line.effective_energy
        )
