"""The Record: one answer with everything needed to understand it and to ask again."""

from __future__ import annotations

import uuid
from datetime import UTC, datetime
from typing import TYPE_CHECKING, Any

from pydantic import BaseModel, ConfigDict, Field

import ct_measure_plugin
from ct_measure_plugin.measurements import find
from ct_measure_plugin.physics.results import Caution, NotMeasured
from ct_measure_plugin.records.region_text import region_from_dict, region_to_dict
from ct_measure_plugin.records.result_text import answer_from_dict, answer_to_dict

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.measurements import Settings
    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.results import Result
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["Preview", "Record", "SourceFacts"]


class _Frozen(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid")


class SourceFacts(_Frozen):
    """Where the pixels came from, in facts that may leave the house."""

    title: str = ""
    series_digest: str = ""
    content_digest: str = ""
    shape: tuple[int, int, int]
    spacing_mm: tuple[float, float, float]
    origin_mm: tuple[float, float, float]
    spacing_source: str = ""
    unit: str
    tilt_deg: float = 0.0
    kvp: tuple[float, ...] = ()
    kernel: tuple[str, ...] = ()
    slice_thickness_mm: tuple[float, ...] = ()

    @classmethod
    def of(cls, volume: Volume) -> SourceFacts:
        """Collect the facts of a volume."""
        acquired = volume.acquisition
        return cls(
            title=volume.source.title,
            series_digest=volume.source.series_digest,
            content_digest=volume.source.content_digest,
            shape=volume.shape,
            spacing_mm=volume.spacing_mm,
            origin_mm=volume.origin_mm,
            spacing_source=volume.source.spacing_source,
            unit=volume.unit,
            tilt_deg=volume.tilt_deg,
            kvp=tuple(sorted({a.kvp for a in acquired if a.kvp is not None})),
            kernel=tuple(sorted({a.kernel for a in acquired if a.kernel})),
            slice_thickness_mm=tuple(
                sorted({a.slice_thickness_mm for a in acquired if a.slice_thickness_mm is not None})
            ),
        )


class Preview(_Frozen):
    """A small picture of the slice that was measured, 8-bit, for the report.

    Attributes
    ----------
    pixels : str
        Base64 of zlib-packed bytes, row by row.
    shape : (int, int)
        Rows and columns.
    extent_mm : (float, float, float, float)
        y of the first and last border, x of the first and last border.
    z_mm : float
        The slice's position.
    window_hu : (float, float)
        The values shown black and white.
    """

    pixels: str
    shape: tuple[int, int]
    extent_mm: tuple[float, float, float, float]
    z_mm: float
    window_hu: tuple[float, float]


class Record(_Frozen):
    """One answer, with what was asked, of what, when, and by which version.

    Examples
    --------
    >>> import numpy as np, ct_measure_plugin as ctm
    >>> from ct_measure_plugin.measurements import find
    >>> volume = ctm.Volume(np.full((1, 40, 40), 7, np.int16), (1.0, 0.5, 0.5))
    >>> disc = ctm.regions.Disc((10, 10), 5, name="plug")
    >>> settings = find("region_statistics").settings_type()
    >>> answer = ctm.measure("region_statistics", volume, disc)
    >>> record = Record.of("region_statistics", settings, (disc,), volume, answer)
    >>> Record.model_validate_json(record.model_dump_json()).answer().mean == answer.mean
    True
    """

    format: int = 1
    id: str
    created: datetime
    software: str
    measurement: str
    settings: dict[str, Any] = Field(default_factory=dict)
    regions: tuple[dict[str, Any], ...] = ()
    source: SourceFacts
    result: dict[str, Any]
    measured: bool
    preview: Preview | None = None

    @classmethod
    def of(
        cls,
        name: str,
        settings: Settings,
        regions: Sequence[Region],
        volume: Volume,
        answer: Result | NotMeasured,
        *,
        preview: Preview | None = None,
    ) -> Record:
        """Make the record of an answer, now."""
        return cls(
            id=str(uuid.uuid4()),
            created=datetime.now(UTC),
            software=f"ct-measure-plugin {ct_measure_plugin.__version__}",
            measurement=name,
            settings=settings.model_dump(mode="json"),
            regions=tuple(region_to_dict(region) for region in regions),
            source=SourceFacts.of(volume),
            result=answer_to_dict(answer),
            measured=not isinstance(answer, NotMeasured),
            preview=preview,
        )

    def answer(self) -> Result | NotMeasured:
        """Rebuild the answer, the same to the last bit."""
        return answer_from_dict(self.result, find(self.measurement).result_type)

    def typed_regions(self) -> tuple[Region, ...]:
        """Rebuild the regions."""
        return tuple(region_from_dict(region) for region in self.regions)

    def typed_settings(self) -> Settings:
        """Rebuild the settings."""
        return find(self.measurement).settings_type(**self.settings)

    @property
    def title(self) -> str:
        """What the measurement is called."""
        return find(self.measurement).title

    @property
    def region_names(self) -> str:
        """The regions' names, or their kinds where they have none."""
        return ", ".join(str(r.get("name") or r["kind"]) for r in self.regions)

    def cautions(self) -> tuple[Caution, ...]:
        """Return the answer's cautions."""
        return self.answer().cautions
