"""What each rod reads against the line of the others, and which material it reads as."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from ct_measure_plugin.physics.results import Quantity
from ct_measure_plugin.physics.rod_fit import LineFit, best_line
from ct_measure_plugin.physics.rod_table import Rods

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.attenuation import Material

__all__ = ["OUTLIER_SIGMA", "Readings", "RodReading", "readings_of"]

#: Distance from the others' line, in standard uncertainties, beyond which a rod is named. With ten
#: rods drawn from a normal distribution one line in 1,600 would name one by chance.
OUTLIER_SIGMA = 4.0

#: Distance within which a reading is said to be that of another material: with the others' line,
#: the reading and the other's density each uncertain, 1 in 370 of true ones lies outside.
SAME_SIGMA = 3.0


@dataclass(frozen=True, slots=True)
class RodReading:
    """One rod: what it should be, what it read, and what the line leaves.

    Attributes
    ----------
    name : str
        What the region was called.
    read, residual : Quantity
        CT number measured, and its distance from the line of all rods, HU.
    sigma : float
        Distance from the line of the others, in standard uncertainties.
    density_read : Quantity
        The density at which the rod would lie on the line of the others, g/cm³.
    density : Quantity
        As entered, g/cm³.
    expected : Quantity
        CT number on the line at the effective energy, HU.
    mu : Quantity
        Attenuation at the effective energy, cm⁻¹, with the density's uncertainty.
    material : str
        The material it was entered as.
    reads_as : str
        For an outlier, the listed material whose CT number it has, or "no listed material";
        else "".
    """

    name: str
    read: Quantity
    residual: Quantity
    sigma: float
    density_read: Quantity
    density: Quantity
    expected: Quantity
    mu: Quantity
    material: str
    reads_as: str = ""


class Readings(NamedTuple):
    """Every rod's reading and, if one is an outlier, the line of the others."""

    rods: tuple[RodReading, ...]
    without: LineFit | None


@dataclass(frozen=True, slots=True, eq=False)
class _Others:
    """The line without one rod: where that rod should lie, and how surely."""

    fit: LineFit
    mu: float
    off: float
    spread: float

    @property
    def sigma(self) -> float:
        return self.off / self.spread


def readings_of(
    rods: Rods, fit: LineFit, names: Sequence[str], library: Sequence[Material]
) -> Readings:
    """Return every rod's reading; the one farthest out is named if it is an outlier.

    Parameters
    ----------
    rods : Rods
        What was read.
    fit : LineFit
        The line of all rods.
    names : sequence of str
        What the regions were called.
    library : sequence of Material
        The materials that an outlier is compared with.
    """
    others = [_others(rods, fit, k) for k in range(len(rods.hu))]
    worst = max(range(len(others)), key=lambda k: abs(others[k].sigma))
    residual = rods.hu - fit.at(fit.mu)
    found = []
    for k, entered in enumerate(rods.materials):
        share = rods.u_density[k] / rods.density[k]
        named = k == worst and abs(others[k].sigma) > OUTLIER_SIGMA
        found.append(
            RodReading(
                name=names[k],
                material=entered.name,
                read=Quantity(float(rods.hu[k]), "HU", float(rods.u_hu[k])),
                expected=Quantity(
                    float(fit.at(fit.mu[k])), "HU", float(fit.parameters[1] * fit.mu[k] * share)
                ),
                residual=Quantity(float(residual[k]), "HU", float(fit.sigma[k])),
                mu=Quantity(float(fit.mu[k]), "cm⁻¹", float(fit.mu[k] * share)),
                density=Quantity(float(rods.density[k]), "g/cm³", float(rods.u_density[k])),
                density_read=_density_read(rods, others[k], k),
                sigma=others[k].sigma,
                reads_as=_reads_as(rods, others[k], k, library) if named else "",
            )
        )
    named = bool(found[worst].reads_as) and others[worst].fit is not fit
    return Readings(tuple(found), others[worst].fit if named else None)


def _others(rods: Rods, fit: LineFit, k: int) -> _Others:
    """Return the line without rod k; where the others fix none, the line of all."""
    alone = best_line(rods.without(k)) if len(rods.hu) > 4 else None
    if alone is None:
        off = float(rods.hu[k] - fit.at(fit.mu[k]))
        return _Others(fit, float(fit.mu[k]), off, float(fit.sigma[k]))
    mu = float(rods.mu(alone.energy)[k])
    slope = float(alone.parameters[1])
    own = math.hypot(float(rods.u_hu[k]), slope * mu * rods.u_density[k] / rods.density[k])
    row = np.array([1.0, mu, slope * float(rods.steepness(alone.energy)[k])])
    spread = math.sqrt(own**2 + float(row @ alone.covariance @ row))
    return _Others(alone, mu, float(rods.hu[k] - alone.at(mu)), spread)


def _density_read(rods: Rods, others: _Others, k: int) -> Quantity:
    """Return the density that puts a rod on the others' line; its own uncertainty left out."""
    per_density = float(others.fit.parameters[1]) * others.mu / rods.density[k]
    own = per_density * rods.u_density[k]
    spread = math.sqrt(max(others.spread**2 - own**2, 0.0))
    return Quantity(
        float(rods.density[k] + others.off / per_density), "g/cm³", float(abs(spread / per_density))
    )


def _reads_as(rods: Rods, others: _Others, k: int, library: Sequence[Material]) -> str:
    """Return the listed material whose CT number on the others' line is that of a rod."""
    fit = others.fit
    candidates = [m for m in library if m.composition != rods.materials[k].composition]
    if not candidates:
        return "no listed material"
    table = Rods.checked(
        np.full(len(candidates), rods.hu[k]), candidates, float(rods.u_hu[k]), water=rods.water
    )
    mu = table.mu(fit.energy)
    slope = float(fit.parameters[1])
    rows = np.stack([np.ones_like(mu), mu, slope * table.steepness(fit.energy)], axis=1)
    line = np.einsum("ij,jk,ik->i", rows, fit.covariance, rows)
    distance = np.abs(table.hu - fit.at(mu))
    spread = np.sqrt(table.sigma(mu, slope) ** 2 + line)
    same = np.flatnonzero(distance <= SAME_SIGMA * spread)
    if not len(same):
        return "no listed material"
    nearest = candidates[int(same[np.argmin(distance[same])])]
    return f"{nearest.density_g_cm3:g} g/cm³ {nearest.name}"
