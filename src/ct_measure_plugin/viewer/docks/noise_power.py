"""The dock of the noise power spectrum, of single scans or of the difference of two."""

from __future__ import annotations

from typing import Any, ClassVar

from qtpy.QtCore import Qt
from qtpy.QtWidgets import QLabel, QPushButton

from ct_measure_plugin.errors import CtMeasureError
from ct_measure_plugin.measurements.noise_power import NoisePowerSettings
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.viewer.differences import add_difference, difference
from ct_measure_plugin.viewer.docks.measurement import MeasurementDock
from ct_measure_plugin.viewer.suggestions import draw_suggested, search_uniform
from ct_measure_plugin.viewer.tasks import run_here

__all__ = ["NoisePowerDock"]


class NoisePowerDock(MeasurementDock):
    """How much noise, of what texture, and what stands out of it."""

    title: ClassVar[str] = "Noise power (NPS)"
    names: ClassVar[tuple[str, ...]] = ("noise_power", "detectability")

    def __init__(self, viewer: napari.viewer.Viewer) -> None:  # type: ignore[name-defined] # noqa: F821
        super().__init__(viewer)

    def _build(self) -> None:
        super()._build()
        self.suggest_button = QPushButton("Suggest a region")
        self.suggest_button.setToolTip(
            "Draw the largest disc of uniform material on the slice shown, over the slices on which"
            " it stays uniform."
        )
        self.suggest_button.clicked.connect(self.suggest)
        self.suggested = QLabel()
        self.suggested.setWordWrap(True)
        self.suggested.setTextFormat(Qt.TextFormat.PlainText)
        self.suggested.setAccessibleName("Why no region was suggested")
        self.suggested.hide()
        self.subtract_button = QPushButton("Subtract repeat scans")
        self.subtract_button.setToolTip(
            "With two images ticked: open their difference over √2, which is noise without the"
            " object, and measure that with the mean alone taken out."
        )
        self.subtract_button.clicked.connect(self.subtract)
        self.sources.changed.connect(self._allow)
        place = self.body.indexOf(self._fold)
        parts = (self.suggest_button, self.suggested, self.subtract_button)
        for step, part in enumerate(parts):
            self.body.insertWidget(place + step, part)
        self._allow()

    def _allow(self) -> None:
        images = self.sources.chosen_images()
        self.suggest_button.setEnabled(bool(images))
        self.subtract_button.setEnabled(len(images) == 2)

    def choose_measurement(self, name: str) -> None:
        """Turn to the other measurement; the patches stay as they were set."""
        before = self._forms.get(self._measurement.name)
        super().choose_measurement(name)
        if before is not None and before is not self.form:
            shared = {one: getattr(before.settings, one) for one in NoisePowerSettings.model_fields}
            self.form.show(self.form.settings.model_copy(update=shared))

    def suggest(self, *_: Any) -> Any:
        """Draw a uniform region on the slice shown, and measure it; return its layer."""
        images = self.sources.chosen_images()
        if not images:
            return None
        point, patch = tuple(self.viewer.dims.point), self.form.settings.model_dump()["patch_px"]
        try:
            place = self.session.placement(images[0])
            found = run_here(
                lambda _work: search_uniform(place, point, patch), "Looking for uniform material"
            )
        except CtMeasureError as error:
            self._say(str(error))
            return None
        if isinstance(found, NotMeasured):
            self._say(f"{found.reason[:1].upper()}{found.reason[1:]}. Remedy: {found.remedy}.")
            return None
        self._say("")
        layer = draw_suggested(self.viewer, place, [found], "uniform region")
        self.sources.look()
        self.sources.choose(regions=layer)
        return layer

    def _say(self, text: str) -> None:
        self.suggested.setText(text)
        self.suggested.setVisible(bool(text))

    def subtract(self, *_: Any) -> Any:
        """Open the difference of the two images ticked, and measure it; return its layer."""
        images = self.sources.chosen_images()
        if len(images) != 2:
            return None
        try:
            first, second = (self.session.placement(one) for one in images)
            found = run_here(lambda _work: difference(first, second), "Subtracting the scans")
        except CtMeasureError as error:
            self.headline.show_answer(None, str(error))
            return None
        layer = add_difference(self.viewer, first, second, found)
        self.sources.look()
        self.form.show(self.form.settings.model_copy(update={"detrend": "mean"}))
        self.sources.choose((layer,))
        return layer
