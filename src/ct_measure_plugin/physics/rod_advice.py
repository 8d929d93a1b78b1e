"""Which rods are too few, and which material would help most."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.rod_table import Rods

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.attenuation import Material

__all__ = ["VAGUEST_ENERGY_KEV", "refusal_of", "too_vague"]

#: Fewer materials leave no residual to judge the line and the energy by.
FEWEST_MATERIALS = 4

#: A narrower span of CT numbers cannot fix a slope (practice of the trade; no standard).
NARROWEST_SPAN_HU = 500.0

#: An energy less certain than this says nothing about a beam.
VAGUEST_ENERGY_KEV = 10.0

#: Energy at which the help of a further rod is judged, keV: it changes little over 50 to 90 keV.
_TYPICAL_KEV = 70.0

#: Denser than what CT numbers are made for: such a rod would harden the beam for all others.
_DENSEST_G_CM3 = 3.0

#: Elements of materials that harden a beam about as water does; others are advised only if need be.
_LIGHT = frozenset({"H", "C", "N", "O", "F", "Ar"})


def refusal_of(rods: Rods, library: Sequence[Material]) -> NotMeasured | None:
    """Return why these rods cannot fix a line, if they cannot."""
    distinct = len({m.composition for m in rods.materials})
    if distinct < FEWEST_MATERIALS:
        return NotMeasured(
            f"{distinct} different materials were given; at least {FEWEST_MATERIALS} are needed",
            _advice(rods, library, "measure more rods, for example air, LDPE, PMMA and PTFE"),
        )
    span = float(np.ptp(rods.hu))
    if span < NARROWEST_SPAN_HU:
        return NotMeasured(
            f"the rods span {span:.0f} HU; at least {NARROWEST_SPAN_HU:.0f} are needed",
            _advice(rods, library, "add air and a dense plastic", widen=True),
        )
    return None


def too_vague(rods: Rods, library: Sequence[Material], u_energy: float | None) -> NotMeasured:
    """Return the refusal of rods that lie on a line but fix no energy."""
    how = "" if u_energy is None else f" (its uncertainty would be {u_energy:.0f} keV)"
    return NotMeasured(
        f"these materials do not fix an effective energy{how}",
        _advice(rods, library, "add a rod of higher atomic number"),
    )


def _advice(rods: Rods, library: Sequence[Material], otherwise: str, *, widen: bool = False) -> str:
    """Return the remedy: the listed material that would make the energy most certain."""
    have = {m.composition for m in rods.materials}
    open_to = [
        m for m in library if m.composition not in have and m.density_g_cm3 <= _DENSEST_G_CM3
    ]
    for group in ([m for m in open_to if m.elements <= _LIGHT], open_to):
        best, least = _best_of(rods, group, widen=widen)
        if least <= VAGUEST_ENERGY_KEV:
            break
    if not best:
        return otherwise
    known = f"{least:.1f}" if least < 9.95 else f"{least:.0f}"
    return f"add a rod of {best}; the energy would then be known to about {known} keV"


def _best_of(rods: Rods, group: Sequence[Material], *, widen: bool) -> tuple[str, float]:
    """Return the material that makes the energy most certain, and how certain; "" if none does."""
    best, least = "", math.inf
    for candidate in group:
        more = _with(rods, candidate)
        if widen and float(np.ptp(more.hu)) < NARROWEST_SPAN_HU:
            continue
        spread = _energy_spread(more)
        if spread < least:
            best, least = candidate.name, spread
    return best, least


def _with(rods: Rods, candidate: Material) -> Rods:
    """Return the rods and one more, read as expected, as surely as the middle one of the others."""
    doubt = float(np.median(rods.u_hu)) if len(rods.u_hu) else 1.0
    one = Rods.checked([float(candidate.hu(_TYPICAL_KEV))], [candidate], doubt)
    return replace(
        rods,
        hu=np.append(rods.hu, one.hu),
        u_hu=np.append(rods.u_hu, one.u_hu),
        density=np.append(rods.density, one.density),
        u_density=np.append(rods.u_density, one.u_density),
        materials=(*rods.materials, candidate),
        log_mu=np.concatenate([rods.log_mu.reshape(-1, one.log_mu.shape[1]), one.log_mu]),
    )


def _energy_spread(rods: Rods) -> float:
    """Return the uncertainty that an energy from these rods would have, keV; inf if none."""
    mu, slope = rods.mu(_TYPICAL_KEV), 1000.0 / rods.water_mu(_TYPICAL_KEV)
    design = np.stack([np.ones_like(mu), mu, slope * rods.steepness(_TYPICAL_KEV)], axis=1)
    jacobian = design / rods.sigma(mu, slope)[:, None]
    normal = jacobian.T @ jacobian
    if not np.linalg.cond(normal) < 1e12:
        return math.inf
    return math.sqrt(float(np.linalg.inv(normal)[2, 2]))
