"""Detectability of a round object, from the noise in the regions and an MTF measured before."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any, ClassVar, Literal, cast

from pydantic import Field, field_validator

from ct_measure_plugin.measurements.base import AREAS, Measurement, RegionNeed, Settings
from ct_measure_plugin.measurements.noise_power import MeasureNoisePower, NoisePowerSettings
from ct_measure_plugin.measurements.noise_spectrum import NoiseSpectrum, spectrum_from
from ct_measure_plugin.measurements.transfer_curve import TransferCurve, transfer_from
from ct_measure_plugin.physics.detectability import Detectability, detectability
from ct_measure_plugin.physics.detection_task import EYES, Eye, Shape, Task
from ct_measure_plugin.physics.results import NotMeasured, Result

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.noise_power import NoisePower
    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.slice_spectrum import SliceSpectrum
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["DetectabilitySettings", "MeasureDetectability"]


class TaskSettings(Settings):
    """Settings of the task, the MTF and the eye."""

    contrast_hu: float = Field(
        10.0,
        title="Contrast (HU)",
        description="difference of the object to its background at its middle, before the system"
        " blurs it",
    )
    size_mm: float = Field(
        2.5,
        gt=0,
        title="Size (mm)",
        description="radius of a disc or designer profile; standard deviation of a Gaussian",
    )
    shape: Shape = Field(
        "disc",
        description="disc: the contrast within its radius; gaussian; designer: contrast times"
        " (1 − r²/R²)ⁿ",
    )
    exponent: float = Field(
        1.0, ge=0, le=20, description="n of the designer profile; the other shapes have none"
    )
    transfer: TransferCurve | None = Field(
        None,
        title="MTF",
        description="a record of an MTF of the same kernel, dose, slice thickness and contrast,"
        " saved as JSON; without one the object is taken as it appears in the image",
        json_schema_extra={"file": "MTF"},
    )
    noise_spectrum: NoiseSpectrum | None = Field(
        None,
        title="Noise spectrum",
        description="a record of a noise power spectrum, saved as JSON, in place of the noise in"
        " the regions",
        json_schema_extra={"file": "noise spectrum"},
    )
    eye: Literal["Burgess", "Eckstein", "none"] = Field(
        "Burgess", description="the eye's response; Burgess peaks at 4 cycles a degree, Eckstein"
        " at 2.3"
    )  # fmt: skip
    distance_mm: float = Field(
        500.0, gt=0, le=10_000, title="Viewing distance (mm)", description="from eye to screen"
    )
    zoom: float = Field(
        1.0, gt=0, le=100, description="mm on the screen a mm of the object", title="Zoom"
    )

    @field_validator("contrast_hu")
    @classmethod
    def _not_zero(cls, given: float) -> float:
        if given == 0:
            raise ValueError("a contrast of 0 is no object")
        return given

    @field_validator("transfer", mode="before")
    @classmethod
    def _read_transfer(cls, given: Any) -> Any:
        """Take a result with an MTF, or read the file that holds one."""
        return transfer_from(given)

    @field_validator("noise_spectrum", mode="before")
    @classmethod
    def _read_spectrum(cls, given: Any) -> Any:
        """Take a measured spectrum, or read the file that holds it."""
        return spectrum_from(given)

    def task(self) -> Task:
        """Return the object."""
        return Task(
            contrast_hu=self.contrast_hu,
            size_mm=self.size_mm,
            shape=self.shape,
            exponent=self.exponent,
        )

    def viewer(self) -> Eye | None:
        """Return the eye before its screen, or None."""
        if self.eye == "none":
            return None
        return replace(EYES[self.eye], distance_mm=self.distance_mm, zoom=self.zoom)


class DetectabilitySettings(NoisePowerSettings, TaskSettings):
    """Settings of detectability: those of the task, then those of the noise power."""


class MeasureDetectability(Measurement):
    """d′ of three model observers for a round object in the noise of the regions."""

    name: ClassVar[str] = "detectability"
    title: ClassVar[str] = "Detectability"
    summary: ClassVar[str] = (
        "How well an object of known size and contrast stands out of the noise."
    )
    settings_type: ClassVar[type[Settings]] = DetectabilitySettings
    result_type: ClassVar[type[Result]] = Detectability
    regions: ClassVar[RegionNeed] = RegionNeed(AREAS, at_least=0, together=True)
    columns: ClassVar[tuple[str, ...]] = ("npw", "npwe", "prewhitening", "npw_auc", "unseen")

    def measure(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> Detectability | NotMeasured:
        """Measure the noise of all regions as one set, or take the spectrum given."""
        wanted = cast("DetectabilitySettings", settings)
        noise: NoisePower | SliceSpectrum | NotMeasured
        if wanted.noise_spectrum is not None:
            noise, cautions = wanted.noise_spectrum.spectrum(), volume.cautions
        elif regions:
            noise = MeasureNoisePower().measure(volume, regions, wanted)
            cautions = noise.cautions
        else:
            return NotMeasured(
                "there is no noise to tell the object from",
                "draw a region in uniform material, or name a record of a noise power spectrum",
                volume.cautions,
            )
        if isinstance(noise, NotMeasured):
            return noise
        found = detectability(
            noise,
            None if wanted.transfer is None else wanted.transfer.curve(),
            task=wanted.task(),
            eye=wanted.viewer(),
        )
        return replace(found, cautions=(*cautions, *found.cautions))

    def marks(
        self,
        volume: Volume,
        regions: Sequence[Region],
        settings: Settings,
        answer: Result | NotMeasured,
    ) -> tuple[Region, ...]:
        """Return the patches that the noise is measured in."""
        if cast("DetectabilitySettings", settings).noise_spectrum is not None:
            return ()
        return MeasureNoisePower().marks(volume, regions, settings, answer)
