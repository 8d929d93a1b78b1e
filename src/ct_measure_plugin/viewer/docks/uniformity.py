"""The dock of uniformity: of the CT numbers, and of their noise."""

from __future__ import annotations

from typing import Any, ClassVar

from qtpy.QtWidgets import QPushButton

from ct_measure_plugin.errors import CtMeasureError
from ct_measure_plugin.viewer.docks.measurement import MeasurementDock
from ct_measure_plugin.viewer.noise_layers import add_local_noise, local_noise
from ct_measure_plugin.viewer.tasks import run_here

__all__ = ["UniformityDock"]


class UniformityDock(MeasurementDock):
    """Whether a water cylinder reads, and is noisy, the same everywhere, live."""

    title: ClassVar[str] = "Uniformity"
    names: ClassVar[tuple[str, ...]] = ("uniformity", "noise_map")

    def __init__(self, viewer: napari.viewer.Viewer) -> None:  # type: ignore[name-defined] # noqa: F821
        super().__init__(viewer)

    def _build(self) -> None:
        super()._build()
        self.map_button = QPushButton("Map as a layer")
        self.map_button.setToolTip(
            "Open the SD in a window around every pixel, of all slices, as a layer over the image."
        )
        self.map_button.clicked.connect(self.open_map)
        self.body.insertWidget(self.body.indexOf(self._fold), self.map_button)

    def choose_measurement(self, name: str) -> None:
        """Turn to the other measurement; only noise has a map of the whole image."""
        super().choose_measurement(name)
        self.map_button.setVisible(name == "noise_map")

    def open_map(self, *_: Any) -> Any:
        """Open the local noise of the image ticked as a layer, and return the layer."""
        images = self.sources.chosen_images()
        if not images:
            return None
        window = self.form.settings.model_dump()["window_px"]
        try:
            place = self.session.placement(images[0])
            found = run_here(lambda work: local_noise(place, window, work), "Mapping the noise")
        except CtMeasureError as error:
            self.headline.show_answer(None, str(error))
            return None
        return add_local_noise(self.viewer, place, found)
