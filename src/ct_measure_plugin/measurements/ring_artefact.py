"""Rings about the rotation centre in slices of uniform material."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, ClassVar, cast

import numpy as np
from pydantic import Field

from ct_measure_plugin.measurements.base import AREAS, Measurement, RegionNeed, Settings
from ct_measure_plugin.measurements.isocentre import isocentre
from ct_measure_plugin.measurements.pixels_inside import chosen_slices, pixels_inside
from ct_measure_plugin.physics.regions import Disc
from ct_measure_plugin.physics.results import NotMeasured, Result
from ct_measure_plugin.physics.ring_artefact import RingArtefact, ring_artefact

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["MeasureRingArtefact", "RingArtefactSettings"]


class RingArtefactSettings(Settings):
    """Settings of the search for rings."""

    isocentre_mm: tuple[float, float] | None = Field(
        None,
        title="Isocentre y, x (mm)",
        description="where the rotation centre lies in the image frame; from the header or the"
        " middle of the image if not set",
    )
    search_px: int = Field(
        0,
        ge=0,
        le=3,
        title="Search the centre (px)",
        description="the rotation centre is looked for within so many pixels; a search makes"
        " faint rings harder to tell from noise",
    )


class MeasureRingArtefact(Measurement):
    """Strength and place of rings, and whether noise alone makes them."""

    name: ClassVar[str] = "ring_artefact"
    title: ClassVar[str] = "Ring artefact"
    summary: ClassVar[str] = "Whether rings stand out of the noise of uniform material, and where."
    settings_type: ClassVar[type[Settings]] = RingArtefactSettings
    result_type: ClassVar[type[Result]] = RingArtefact
    regions: ClassVar[RegionNeed] = RegionNeed(AREAS, at_least=0, together=True)
    columns: ClassVar[tuple[str, ...]] = (
        "rings_found",
        "worst_radius",
        "worst_amplitude",
        "chance",
        "ring_index",
    )

    def measure(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> RingArtefact | NotMeasured:
        """Search the regions, or the cylinder that is found, on their slices, or on all."""
        wanted = cast("RingArtefactSettings", settings)
        slices = chosen_slices(volume, regions)
        inside = pixels_inside(volume, regions, slices)
        if not slices or (inside is not None and not inside.any()):
            return NotMeasured(
                "the regions hold no pixel", "draw them within the volume", volume.cautions
            )
        _, y, x = volume.origin_mm
        center = isocentre(volume, wanted.isocentre_mm, slices[0])
        found = ring_artefact(
            volume.hu
            if len(slices) == volume.shape[0]
            else np.stack([volume.plane(k) for k in slices]),
            spacing_mm=(volume.spacing_mm[1], volume.spacing_mm[2]),
            z_mm=volume.positions_mm[slices].tolist(),
            center_mm=(center[0] - y, center[1] - x),
            inside=inside,
            search_px=wanted.search_px,
            unit=volume.unit,
        )
        if isinstance(found, NotMeasured):
            return replace(found, cautions=volume.cautions)
        picture = found.ring_map
        return replace(
            found,
            ring_map=replace(picture, origin=(picture.origin[0] + y, picture.origin[1] + x)),
            center_y=replace(found.center_y, y=found.center_y.y + y),
            center_x=replace(found.center_x, y=found.center_x.y + x),
            cautions=(*volume.cautions, *found.cautions),
        )

    def marks(
        self,
        volume: Volume,
        regions: Sequence[Region],  # noqa: ARG002
        settings: Settings,  # noqa: ARG002
        answer: Result | NotMeasured,
    ) -> tuple[Region, ...]:
        """Return a circle at the radius of each ring that was found, if it fits."""
        if not isinstance(answer, RingArtefact):
            return ()
        center = (float(answer.center_y.y[0]), float(answer.center_x.y[0]))
        radii = [ring.radius.value for ring in answer.rings]
        z = answer.center_y.x
        span = float(z[0]) if len(z) == 1 else (float(z[0]), float(z[-1]))
        low = np.asarray(volume.origin_mm[1:]) - np.asarray(volume.spacing_mm[1:]) / 2
        high = low + np.asarray(volume.shape[1:]) * np.asarray(volume.spacing_mm[1:])
        room = float(np.min(np.concatenate([center - low, high - center])))
        return tuple(Disc(center, r, z_mm=span) for r in radii if r <= room)
