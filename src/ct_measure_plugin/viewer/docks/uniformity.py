"""The dock of uniformity: of the CT numbers, and of their noise."""

from __future__ import annotations

from typing import ClassVar

from ct_measure_plugin.viewer.docks.measurement import MeasurementDock

__all__ = ["UniformityDock"]


class UniformityDock(MeasurementDock):
    """Whether a water cylinder reads, and is noisy, the same everywhere, live."""

    title: ClassVar[str] = "Uniformity"
    names: ClassVar[tuple[str, ...]] = ("uniformity", "noise_map")

    def __init__(self, viewer: napari.viewer.Viewer) -> None:  # type: ignore[name-defined] # noqa: F821
        super().__init__(viewer)
