"""The dock of the noise power spectrum, of single scans or of the difference of two."""

from __future__ import annotations

from typing import Any, ClassVar

from qtpy.QtWidgets import QPushButton

from ct_measure_plugin.errors import CtMeasureError
from ct_measure_plugin.viewer.differences import add_difference, difference
from ct_measure_plugin.viewer.docks.measurement import MeasurementDock
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
        self.subtract_button = QPushButton("Subtract repeat scans")
        self.subtract_button.setToolTip(
            "With two images ticked: open their difference over √2, which is noise without the"
            " object, and measure that with the mean alone taken out."
        )
        self.subtract_button.clicked.connect(self.subtract)
        self.sources.changed.connect(self._allow)
        self.body.insertWidget(self.body.indexOf(self._fold), self.subtract_button)
        self._allow()

    def _allow(self) -> None:
        self.subtract_button.setEnabled(len(self.sources.chosen_images()) == 2)

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
