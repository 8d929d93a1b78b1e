"""The dock of ring artefacts."""

from __future__ import annotations

from typing import ClassVar

from ct_measure_plugin.viewer.docks.measurement import MeasurementDock

__all__ = ["RingArtefactDock"]


class RingArtefactDock(MeasurementDock):
    """Rings about the isocentre, told from noise, live."""

    title: ClassVar[str] = "Rings"
    names: ClassVar[tuple[str, ...]] = ("ring_artefact",)

    def __init__(self, viewer: napari.viewer.Viewer) -> None:  # type: ignore[name-defined] # noqa: F821
        super().__init__(viewer)
