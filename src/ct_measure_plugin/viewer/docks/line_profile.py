"""The dock of the line profile."""

from __future__ import annotations

from typing import ClassVar

from ct_measure_plugin.viewer.docks.measurement import MeasurementDock

__all__ = ["LineProfileDock"]


class LineProfileDock(MeasurementDock):
    """Values along a drawn line, live."""

    title: ClassVar[str] = "Line profile"
    names: ClassVar[tuple[str, ...]] = ("line_profile",)

    def __init__(self, viewer: napari.viewer.Viewer) -> None:  # type: ignore[name-defined] # noqa: F821
        super().__init__(viewer)
