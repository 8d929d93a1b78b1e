"""Slices with rods of a layout, turned and shifted; edges are those of blurred discs."""

from __future__ import annotations

import math

import numpy as np
from scipy import special

from ct_measure_plugin.physics.attenuation import MATERIALS
from ct_measure_plugin.physics.rod_layout import LayoutRod

__all__ = ["SPIRAL", "layout", "scene", "turn"]

NAMES = ("PTFE", "LDPE", "POM", "air", "PMMA", "polystyrene", "polycarbonate", "nylon-6")

#: Places on a spiral about the origin, y and x in mm: no two distances are alike.
SPIRAL = tuple(
    (
        9.0 * math.sqrt(1 + 1.4 * k) * math.sin(2.4 * k),
        9.0 * math.sqrt(1 + 1.4 * k) * math.cos(2.4 * k),
    )
    for k in range(len(NAMES))
)


def layout(places=SPIRAL, names=NAMES, diameter=8.0):
    """Rods of the given materials; a name that is no material has none."""
    return [
        LayoutRod(place, diameter, MATERIALS.get(name), name)
        for place, name in zip(places, names, strict=True)
    ]


def turn(place, angle_deg):
    """Turn (y, x) counter-clockwise on a screen whose y points down."""
    c, s = math.cos(math.radians(angle_deg)), math.sin(math.radians(angle_deg))
    y, x = place
    return c * y - s * x, s * y + c * x


def scene(
    rods,
    *,
    angle=0.0,
    shift=(38.0, 40.0),
    shape=(160, 160),
    spacing=(0.5, 0.5),
    noise=5.0,
    blur=0.6,
    energy=70.0,
    seed=0,
    values=None,
    unit_hu=300.0,
):
    """CT numbers of rods in water; `values` overrules single rods by their place in the list."""
    y, x = np.mgrid[: shape[0], : shape[1]]
    image = np.zeros(shape)
    for k, rod in enumerate(rods):
        ty, tx = turn(rod.center_mm, angle)
        r = np.hypot(y * spacing[0] - ty - shift[0], x * spacing[1] - tx - shift[1])
        known = float(rod.material.hu(energy)) if rod.material else unit_hu
        value = (values or {}).get(k, known)
        image += value * 0.5 * special.erfc((r - rod.diameter_mm / 2) / (math.sqrt(2) * blur))
    return image + np.random.default_rng(seed).normal(0, noise, shape)
