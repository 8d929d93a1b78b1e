"""Images of rods in water whose CT numbers come from the attenuation table."""

from __future__ import annotations

import math

import numpy as np

from ct_measure_plugin.measurements.materials import find_material, shipped_materials
from ct_measure_plugin.physics.coverage import plane_coverage
from ct_measure_plugin.physics.regions import Disc
from ct_measure_plugin.physics.volume import Volume

__all__ = ["NAMES", "RING", "ring_of_rods"]

NAMES = ("air", "LDPE", "polystyrene", "PMMA", "POM", "PTFE", "polycarbonate", "nylon-6")
SIDE, STEP, RADIUS = 104, 0.5, 4.0
MIDDLE = STEP * (SIDE - 1) / 2
PLACES = tuple(
    (
        MIDDLE + 17.0 * math.sin(math.tau * k / len(NAMES)),
        MIDDLE + 17.0 * math.cos(math.tau * k / len(NAMES)),
    )
    for k in range(len(NAMES))
)

#: Regions well inside the rods, named by their material.
RING = tuple(Disc(place, 3.0, name=name) for place, name in zip(PLACES, NAMES, strict=True))


def ring_of_rods(
    *,
    energy: float = 70.0,
    noise: float = 0.0,
    seed: int = 0,
    names: tuple[str, ...] = NAMES,
    hu: dict[str, float] | None = None,
    whole: bool = True,
) -> Volume:
    """Two slices of rods on a ring in water; pixels on a border are mixed by their area."""
    plane = np.zeros((SIDE, SIDE))
    for place, name in zip(PLACES, names, strict=False):
        value = float(find_material(name, shipped_materials()).hu(energy))
        value = (hu or {}).get(name, value)
        cover = plane_coverage(
            Disc(place, RADIUS), (SIDE, SIDE), spacing_mm=(STEP, STEP), origin_mm=(0.0, 0.0)
        )
        part = plane[cover.rows, cover.columns]
        part += cover.weights * (value - part)
    values = plane + np.random.default_rng(seed).normal(0, noise, (2, SIDE, SIDE))
    values = np.rint(values).astype(np.int16) if whole else values
    return Volume(values, (2.0, STEP, STEP))
