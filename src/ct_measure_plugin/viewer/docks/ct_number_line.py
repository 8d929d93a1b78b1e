"""The dock of the CT-number scale."""

from __future__ import annotations

from typing import ClassVar

from ct_measure_plugin.viewer.docks.measurement import MeasurementDock

__all__ = ["CtNumberLineDock"]


class CtNumberLineDock(MeasurementDock):
    """The CT-number scale, live."""

    title: ClassVar[str] = "CT-number scale"
    names: ClassVar[tuple[str, ...]] = ("ct_number_line",)

    def __init__(self, viewer: napari.viewer.Viewer) -> None:  # type: ignore[name-defined] # noqa: F821
        super().__init__(viewer)
