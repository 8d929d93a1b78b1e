"""What the rods of a set read on a volume, and what is to be said of those that cannot be read."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.measurements.gather import gather
from ct_measure_plugin.physics.results import Caution, NotMeasured, Quantity
from ct_measure_plugin.physics.rod_mean import RodMean, rod_mean
from ct_measure_plugin.physics.water import water_density

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.attenuation import Material
    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["Rod", "at_temperature", "doubt_of", "read_rods"]

#: Fewer pixels than this are refused: a spread from so few tells nothing (common practice).
TOO_FEW_PIXELS = 9


@dataclass(frozen=True, slots=True)
class Rod:
    """A region with its material and what it reads."""

    name: str
    material: Material
    read: RodMean


def at_temperature(material: Material, temperature_c: float | None) -> Material:
    """Return water at its own temperature; other materials as they are."""
    if temperature_c is None or material.composition != "H2O":
        return material
    density = water_density(temperature_c)
    return replace(
        material,
        density_g_cm3=density.value,
        density_uncertainty_g_cm3=density.uncertainty or 0.0,
    )


def doubt_of(mean: Quantity, further_hu: float) -> float:
    """Return a reading's uncertainty; that of exact and noise-free values is not quite 0."""
    return float(np.hypot(np.hypot(mean.uncertainty or 0.0, further_hu), 1e-3))


def read_rods(
    volume: Volume, regions: Sequence[Region], materials: Sequence[Material]
) -> tuple[list[Rod], list[Caution]]:
    """Return every rod that can be read, and what is to be said of the others."""
    rods: list[Rod] = []
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
        rods.append(Rod(region.name or material.name, material, read))
    return rods, cautions
