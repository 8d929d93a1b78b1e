"""The dock of the noise power spectrum."""

from __future__ import annotations

from typing import ClassVar

from ct_measure_plugin.viewer.docks.measurement import MeasurementDock

__all__ = ["NoisePowerDock"]


class NoisePowerDock(MeasurementDock):
    """How much noise, and of what texture."""

    title: ClassVar[str] = "Noise power (NPS)"
    names: ClassVar[tuple[str, ...]] = ("noise_power",)

    def __init__(self, viewer: napari.viewer.Viewer) -> None:  # type: ignore[name-defined] # noqa: F821
        super().__init__(viewer)
