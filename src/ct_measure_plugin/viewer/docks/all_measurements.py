"""The dock that offers every measurement of the catalogue, new ones included."""

from __future__ import annotations

from typing import ClassVar

from ct_measure_plugin.measurements import DRAWN
from ct_measure_plugin.viewer.docks.measurement import MeasurementDock

__all__ = ["AllMeasurementsDock"]


class AllMeasurementsDock(MeasurementDock):
    """Any measurement, by its title."""

    title: ClassVar[str] = "All measurements"
    names: ClassVar[tuple[str, ...]] = DRAWN

    def __init__(self, viewer: napari.viewer.Viewer) -> None:  # type: ignore[name-defined] # noqa: F821
        super().__init__(viewer)
