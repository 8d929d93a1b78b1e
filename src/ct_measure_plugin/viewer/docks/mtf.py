"""The MTF dock: from a straight edge, a circular one, or a wire."""

from __future__ import annotations

from typing import ClassVar

from ct_measure_plugin.viewer.docks.measurement import MeasurementDock

__all__ = ["MtfDock"]


class MtfDock(MeasurementDock):
    """Resolution from whatever the phantom offers."""

    title: ClassVar[str] = "MTF"
    names: ClassVar[tuple[str, ...]] = ("edge_mtf", "disc_mtf", "wire_mtf")

    def __init__(self, viewer: napari.viewer.Viewer) -> None:  # type: ignore[name-defined] # noqa: F821
        super().__init__(viewer)
