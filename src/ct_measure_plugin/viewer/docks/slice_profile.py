"""The dock of the slice profile."""

from __future__ import annotations

from typing import ClassVar

from ct_measure_plugin.viewer.docks.measurement import MeasurementDock
from ct_measure_plugin.viewer.docks.sources import ALL_SLICES

__all__ = ["SliceProfileDock"]


class SliceProfileDock(MeasurementDock):
    """The slice sensitivity profile from a bead, a ramp or a wire, live."""

    title: ClassVar[str] = "Slice profile"
    names: ClassVar[tuple[str, ...]] = ("slice_profile",)

    def __init__(self, viewer: napari.viewer.Viewer) -> None:  # type: ignore[name-defined] # noqa: F821
        super().__init__(viewer)
        self.sources.slices.setCurrentText(ALL_SLICES)  # a single slice shows nothing along z
