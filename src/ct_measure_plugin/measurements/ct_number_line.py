"""The CT-number line: rods of known composition, one region a rod, all together one line."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any, ClassVar, cast

from pydantic import Field, field_validator

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.measurements.base import AREAS, Measurement, RegionNeed, Settings
from ct_measure_plugin.measurements.materials import (
    MaterialEntry,
    find_material,
    load_materials,
    shipped_materials,
)
from ct_measure_plugin.measurements.rod_beam import beam_of, disagreement
from ct_measure_plugin.measurements.rod_layouts import (
    FoundRods,
    RodLayout,
    find_rods,
    load_layout,
)
from ct_measure_plugin.measurements.rod_set import at_temperature, doubt_of, read_rods
from ct_measure_plugin.physics.attenuation import MATERIALS, Material
from ct_measure_plugin.physics.beam_quality import BeamQuality, Detector
from ct_measure_plugin.physics.ct_number_line import CtNumberLine, ct_number_line
from ct_measure_plugin.physics.results import Caution, NotMeasured, Result

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["CtNumberLineSettings", "MeasureCtNumberLine"]


class CtNumberLineSettings(Settings):
    """Settings of the CT-number line."""

    rods: tuple[str, ...] = Field(
        (),
        title="Materials of the rods",
        description="the material of each region in order; empty if the regions are named by their"
        " material",
    )
    materials: tuple[MaterialEntry, ...] = Field(
        (),
        title="List of materials",
        description="a file of your own with formulas and densities; empty for the list that is"
        " shipped",
        json_schema_extra={"file": "materials"},
    )
    layout: RodLayout | None = Field(
        None,
        title="Layout of the rods",
        description="a file that says where the rods are in their phantom; they are then found by"
        " themselves, and no regions are drawn",
        json_schema_extra={"file": "layout"},
    )
    layout_z_mm: float | None = Field(
        None,
        title="Slice of the rods (mm)",
        description="position of the slice on which a layout is looked for; the middle one if it"
        " is not set",
    )
    layout_slices: int = Field(
        1,
        ge=1,
        le=100,
        title="Slices of the rods",
        description="so many slices about it are averaged to find the rods, and measured",
    )
    further_hu: float = Field(
        1.0,
        ge=0.0,
        le=100.0,
        title="Further uncertainty (HU)",
        description="standard uncertainty of a rod's CT number beyond its noise: place in the"
        " object, scatter, calibration. 1 HU is common practice, not a standard",
    )
    water_temperature_c: float | None = Field(
        None,
        ge=0.0,
        le=40.0,
        title="Water temperature (°C)",
        description="temperature of the water rod, from which its density follows",
    )
    scale_water_g_cm3: float = Field(
        1.0,
        ge=0.9,
        le=1.1,
        title="Water of the scale (g/cm³)",
        description="density of the water that the scanner calls 0 HU: 1 by definition, 0.9982 if"
        " it was calibrated on water of 20 °C",
        json_schema_extra={"step": 0.0001},
    )

    hvl_mm_al: float | None = Field(
        None,
        gt=0.0,
        lt=60.0,
        title="Half-value layer (mm Al)",
        description="of the beam in air, measured; the energy that it predicts is then compared",
    )
    filtration_mm_al: float | None = Field(
        None,
        gt=0.0,
        lt=60.0,
        title="Filtration (mm Al)",
        description="total filtration of the beam, where the half-value layer is not known",
    )
    kvp: float | None = Field(
        None,
        ge=40.0,
        le=160.0,
        title="Tube voltage (kV)",
        description="where the header does not tell it",
    )
    path_mm: float | None = Field(
        None,
        ge=0.0,
        le=800.0,
        title="Water path (mm)",
        description="water-equivalent path through the phantom; by default from the slice",
    )
    detector: Detector = Field(
        "energy integrating",
        title="Detector",
        description="how it weighs photons, for the energy that the beam predicts",
    )

    @field_validator("materials", mode="before")
    @classmethod
    def _read(cls, given: Any) -> Any:
        """Read a file that is given by its path: the settings hold what it says, not where."""
        if isinstance(given, tuple | list) and len(given) == 1 and isinstance(given[0], str):
            given = given[0]
        if not isinstance(given, str):
            return given
        return load_materials(given) if given.strip() else ()

    @field_validator("layout", mode="before")
    @classmethod
    def _read_layout(cls, given: Any) -> Any:
        """Read a layout that is given by its file's path."""
        if not isinstance(given, str):
            return given
        return load_layout(given) if given.strip() else None

    @property
    def listed(self) -> tuple[MaterialEntry, ...]:
        """The list of materials in use."""
        return self.materials or shipped_materials()


class MeasureCtNumberLine(Measurement):
    """The CT-number scale: its line, effective energy, and every rod's residual."""

    name: ClassVar[str] = "ct_number_line"
    title: ClassVar[str] = "CT-number line"
    summary: ClassVar[str] = (
        "Whether the HU scale is right and which energy it behaves as, from rods of known material."
    )
    settings_type: ClassVar[type[Settings]] = CtNumberLineSettings
    result_type: ClassVar[type[Result]] = CtNumberLine
    regions: ClassVar[RegionNeed] = RegionNeed(AREAS, at_least=0, together=True)
    columns: ClassVar[tuple[str, ...]] = (
        "effective_energy",
        "scale_factor",
        "water_offset",
        "largest_residual",
        "slope",
        "intercept",
    )

    def measure(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> CtNumberLine | NotMeasured:
        """Measure all rods as one set."""
        wanted = cast("CtNumberLineSettings", settings)
        if not volume.is_hu:
            return NotMeasured(
                f"the values are in {volume.unit or 'an unknown unit'}, not HU",
                "use a series that is rescaled to HU",
                volume.cautions,
            )
        placed = _placed(volume, regions, wanted)
        if isinstance(placed, NotMeasured):
            return replace(placed, cautions=volume.cautions)
        if placed is not None:
            regions = placed.regions
        rods, cautions = read_rods(volume, regions, _materials_of(regions, wanted))
        temperature = wanted.water_temperature_c
        materials = [at_temperature(rod.material, temperature) for rod in rods]
        found = ct_number_line(
            [rod.read.mean.value for rod in rods],
            materials,
            hu_uncertainty=[doubt_of(rod.read.mean, wanted.further_hu) for rod in rods],
            names=[rod.name for rod in rods],
            library=[at_temperature(entry.material(), temperature) for entry in wanted.listed],
            water=replace(MATERIALS["water"], density_g_cm3=wanted.scale_water_g_cm3),
        )
        said = (*volume.cautions, *cautions, *found.cautions)
        if isinstance(found, NotMeasured):
            return replace(found, cautions=said)
        if placed is not None:
            found = replace(
                found,
                layout_rotation=placed.found.rotation,
                layout_scale=placed.found.scale,
                places=placed.found.rods,
            )
            said = (*placed.found.cautions, *said)
        return _beside_the_beam(replace(found, cautions=said), volume, regions, materials, wanted)

    def marks(
        self,
        volume: Volume,
        regions: Sequence[Region],
        settings: Settings,
        answer: Result | NotMeasured,
    ) -> tuple[Region, ...]:
        """Return where the rods were read: the regions drawn, or those that a layout found."""
        if not isinstance(answer, CtNumberLine):
            return ()
        placed = _placed(volume, regions, cast("CtNumberLineSettings", settings))
        found = placed.regions if isinstance(placed, FoundRods) else tuple(regions)
        read = {rod.name for rod in answer.rods}
        return tuple(region for region in found if not region.name or region.name in read)


def _placed(
    volume: Volume, regions: Sequence[Region], wanted: CtNumberLineSettings
) -> FoundRods | NotMeasured | None:
    """Return the rods that a layout finds, or None where regions were drawn."""
    if wanted.layout is None:
        if regions:
            return None
        return NotMeasured(
            "there are no rods",
            "draw a region in each rod and name it by its material, or give a layout",
        )
    if regions:
        raise ArgumentError("layout", "must be left out where regions are given", "both")
    return find_rods(
        volume,
        wanted.layout,
        z_mm=wanted.layout_z_mm,
        slices=wanted.layout_slices,
        materials=wanted.listed,
    )


def _beside_the_beam(
    found: CtNumberLine,
    volume: Volume,
    regions: Sequence[Region],
    materials: Sequence[Material],
    wanted: CtNumberLineSettings,
) -> CtNumberLine:
    """Return the line with the energy that the beam's quality predicts, if it was given."""
    beam = beam_of(
        volume,
        regions,
        materials,
        kvp=wanted.kvp,
        hvl_mm=wanted.hvl_mm_al,
        filtration_mm=wanted.filtration_mm_al,
        path_mm=wanted.path_mm,
        detector=wanted.detector,
    )
    if isinstance(beam, BeamQuality):
        return replace(
            found,
            beam_energy=beam.energy,
            beam_water_energy=beam.water_energy,
            cautions=(*found.cautions, *disagreement(found.effective_energy, beam)),
        )
    if beam is None:
        return found
    said = Caution(
        "beam-unknown", f"No energy from the beam's quality: {beam.reason}.", beam.remedy
    )
    return replace(found, cautions=(*found.cautions, said))


def _materials_of(regions: Sequence[Region], wanted: CtNumberLineSettings) -> tuple[Material, ...]:
    names = tuple(region.name for region in regions)
    if wanted.rods and wanted.layout is None:
        names = wanted.rods
    if len(names) != len(regions):
        raise ArgumentError("rods", f"must name {len(regions)} regions", len(names))
    return tuple(find_material(name, wanted.listed) for name in names)
