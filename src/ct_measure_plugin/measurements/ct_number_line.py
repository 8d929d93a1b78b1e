"""The CT-number line: rods of known composition, one region a rod, all together one line."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any, ClassVar, cast

import numpy as np
from pydantic import Field, field_validator

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.measurements.base import AREAS, Measurement, RegionNeed, Settings
from ct_measure_plugin.measurements.gather import gather
from ct_measure_plugin.measurements.materials import (
    MaterialEntry,
    find_material,
    load_materials,
    shipped_materials,
)
from ct_measure_plugin.measurements.rod_layouts import (
    FoundRods,
    RodLayout,
    find_rods,
    load_layout,
)
from ct_measure_plugin.physics.attenuation import MATERIALS, Material
from ct_measure_plugin.physics.ct_number_line import CtNumberLine, ct_number_line
from ct_measure_plugin.physics.results import Caution, NotMeasured, Quantity, Result
from ct_measure_plugin.physics.rod_mean import RodMean, rod_mean
from ct_measure_plugin.physics.water import water_density

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["CtNumberLineSettings", "MeasureCtNumberLine"]

#: Fewer pixels than this are refused: a spread from so few tells nothing (common practice).
TOO_FEW_PIXELS = 9


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


@dataclass(frozen=True, slots=True)
class _Rod:
    """A region with its material and what it reads."""

    name: str
    material: Material
    read: RodMean


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
        rods, cautions = _read_rods(volume, regions, _materials_of(regions, wanted))
        library = [_at_temperature(entry.material(), wanted) for entry in wanted.listed]
        found = ct_number_line(
            [rod.read.mean.value for rod in rods],
            [_at_temperature(rod.material, wanted) for rod in rods],
            hu_uncertainty=[_doubt(rod.read.mean, wanted) for rod in rods],
            names=[rod.name for rod in rods],
            library=library,
            water=replace(MATERIALS["water"], density_g_cm3=wanted.scale_water_g_cm3),
        )
        said = (*volume.cautions, *cautions, *found.cautions)
        if placed is None or isinstance(found, NotMeasured):
            return replace(found, cautions=said)
        return replace(
            found,
            layout_rotation=placed.found.rotation,
            layout_scale=placed.found.scale,
            places=placed.found.rods,
            cautions=(*placed.found.cautions, *said),
        )

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


def _materials_of(regions: Sequence[Region], wanted: CtNumberLineSettings) -> tuple[Material, ...]:
    names = tuple(region.name for region in regions)
    if wanted.rods and wanted.layout is None:
        names = wanted.rods
    if len(names) != len(regions):
        raise ArgumentError("rods", f"must name {len(regions)} regions", len(names))
    return tuple(find_material(name, wanted.listed) for name in names)


def _at_temperature(material: Material, wanted: CtNumberLineSettings) -> Material:
    """Return water at its own temperature; other materials as they are."""
    if wanted.water_temperature_c is None or material.composition != "H2O":
        return material
    density = water_density(wanted.water_temperature_c)
    return replace(
        material,
        density_g_cm3=density.value,
        density_uncertainty_g_cm3=density.uncertainty or 0.0,
    )


def _doubt(mean: Quantity, wanted: CtNumberLineSettings) -> float:
    """Return a reading's uncertainty; that of exact and noise-free values is not quite 0."""
    return float(np.hypot(np.hypot(mean.uncertainty or 0.0, wanted.further_hu), 1e-3))


def _read_rods(
    volume: Volume, regions: Sequence[Region], materials: Sequence[Material]
) -> tuple[list[_Rod], list[Caution]]:
    """Return every rod that can be read, and what is to be said of the others."""
    rods: list[_Rod] = []
    cautions: list[Caution] = []
    for number, (region, material) in enumerate(zip(regions, materials, strict=True), start=1):
        called = f"Rod {number} ({region.name or material.name})"
        found = gather(volume, region)
        own = () if isinstance(found, NotMeasured) else found.cautions[len(volume.cautions) :]
        why = ""
        if isinstance(found, NotMeasured):
            why = found.reason
        elif any(caution.code == "clipped-values" for caution in own):
            why = "part of its values stands at the end of the stored range"
        elif np.count_nonzero(found.weights) < TOO_FEW_PIXELS:
            why = f"the region holds fewer than {TOO_FEW_PIXELS} pixels"
        if isinstance(found, NotMeasured) or why:
            cautions.append(
                Caution(
                    "rod-left-out",
                    f"{called} was left out: {why}.",
                    "Move the region onto its rod, or take it away.",
                )
            )
            continue
        read = rod_mean(found.values, found.weights, spacing_mm=found.spacing_mm)
        cautions += [replace(caution, text=f"{called}: {caution.text}") for caution in own]
        if read.uneven and read.step is not None:
            cautions.append(
                Caution(
                    "rod-uneven",
                    f"{called} reads {read.step} {'more' if read.step.value > 0 else 'less'} near"
                    " its border than in its middle.".replace(" -", " "),
                    "Draw the region smaller, well inside the rod.",
                )
            )
        rods.append(_Rod(region.name or material.name, material, read))
    return rods, cautions
