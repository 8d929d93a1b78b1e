"""Rods with what they read and what they are, and their attenuation over energy."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.attenuation import MATERIALS, Material

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    FloatArray = NDArray[np.float64]

__all__ = ["ENERGIES_KEV", "HALF_STEP_KEV", "Rods", "grid_mu", "log_mu_of"]

#: Energies searched, keV: below and above what any diagnostic beam behaves as.
ENERGIES_KEV = np.arange(30.0, 140.05, 0.5)

#: The finer grid on which attenuation is tabulated once a material and interpolated, keV.
_FINE_KEV = np.arange(ENERGIES_KEV[0] - 1.0, ENERGIES_KEV[-1] + 1.05, 0.1)
_PER_KEV = 10.0

#: Half the step of derivatives with energy, keV.
HALF_STEP_KEV = 0.25


@lru_cache(maxsize=512)
def log_mu_of(entered: Material) -> FloatArray:
    """Return ln μ of a material on the fine grid of energies, μ in cm⁻¹."""
    found = np.log(entered.mu(_FINE_KEV))
    found.setflags(write=False)
    return found


@dataclass(frozen=True, slots=True, eq=False)
class Rods:
    """Rods with what they read, what they are, and their μ over energy.

    Attributes
    ----------
    hu, u_hu : ndarray, shape (n,)
        CT numbers and their standard uncertainties, HU.
    density, u_density : ndarray, shape (n,)
        g/cm³.
    materials : tuple of Material
        One a rod.
    log_mu : ndarray, shape (n, m)
        ln μ on the fine grid of energies, μ in cm⁻¹.
    water : Material
        What the scale takes for water.
    """

    hu: FloatArray
    u_hu: FloatArray
    density: FloatArray
    u_density: FloatArray
    materials: tuple[Material, ...]
    log_mu: FloatArray
    water: Material

    @classmethod
    def checked(
        cls,
        hu: ArrayLike,
        materials: Sequence[Material],
        u_hu: ArrayLike,
        u_density: ArrayLike | None = None,
        water: Material | None = None,
    ) -> Rods:
        """Return the rods with the attenuation table of each, after checking what was given."""
        values = np.asarray(hu, dtype=float).ravel()
        if len(values) != len(materials):
            raise ArgumentError("materials", f"must name {len(values)} rods", len(materials))
        if not bool(np.all(np.isfinite(values))):
            raise ArgumentError("hu", "must be finite", hu)
        doubt = np.broadcast_to(np.asarray(u_hu, dtype=float), values.shape)
        if not bool(np.all((doubt > 0) & np.isfinite(doubt))):
            raise ArgumentError("hu_uncertainty", "must be greater than 0", u_hu)
        own = [m.density_uncertainty_g_cm3 for m in materials] if u_density is None else u_density
        density = np.broadcast_to(np.asarray(own, dtype=float), values.shape)
        if not bool(np.all((density >= 0) & np.isfinite(density))):
            raise ArgumentError("density_uncertainty_g_cm3", "must not be negative", u_density)
        table = [log_mu_of(m) for m in materials]
        return cls(
            values,
            doubt,
            np.array([m.density_g_cm3 for m in materials], dtype=float),
            density,
            tuple(materials),
            np.stack(table) if table else np.empty((0, len(_FINE_KEV))),
            MATERIALS["water"] if water is None else water,
        )

    def without(self, k: int) -> Rods:
        """Return the rods but the k-th."""
        keep = np.arange(len(self.hu)) != k
        return replace(
            self,
            hu=self.hu[keep],
            u_hu=self.u_hu[keep],
            density=self.density[keep],
            u_density=self.u_density[keep],
            materials=tuple(m for i, m in enumerate(self.materials) if i != k),
            log_mu=self.log_mu[keep],
        )

    def mu(self, energy: float) -> FloatArray:
        """Return μ of each rod, cm⁻¹: ln μ interpolated, within 2e-6 of the table."""
        return _at(self.log_mu, energy)

    def water_mu(self, energy: float) -> float:
        """Return μ of the scale's water, cm⁻¹."""
        return float(_at(log_mu_of(self.water)[None], energy)[0])

    def steepness(self, energy: float) -> FloatArray:
        """Return dμ/dE of each rod, cm⁻¹ per keV."""
        slope: FloatArray = (self.mu(energy + HALF_STEP_KEV) - self.mu(energy - HALF_STEP_KEV)) / (
            2 * HALF_STEP_KEV
        )
        return slope

    def sigma(self, mu: FloatArray, slope: FloatArray | float) -> FloatArray:
        """Return the standard uncertainty of each rod about the line, HU; energies go last."""
        shape = (-1, *(1,) * (mu.ndim - 1))
        share = (self.u_density / self.density).reshape(shape)
        total: FloatArray = np.hypot(self.u_hu.reshape(shape), slope * mu * share)
        return total


def _at(log_mu: FloatArray, energy: float) -> FloatArray:
    place = (energy - _FINE_KEV[0]) * _PER_KEV
    k = min(max(int(place), 0), log_mu.shape[1] - 2)
    share = place - k
    found: FloatArray = np.exp((1 - share) * log_mu[:, k] + share * log_mu[:, k + 1])
    return found


def grid_mu(log_mu: FloatArray) -> FloatArray:
    """Return μ on the grid of energies, shape (n, energies)."""
    step = round(float(ENERGIES_KEV[1] - ENERGIES_KEV[0]) * _PER_KEV)
    first = round(float(ENERGIES_KEV[0] - _FINE_KEV[0]) * _PER_KEV)
    columns = first + step * np.arange(len(ENERGIES_KEV))
    return np.asarray(np.exp(log_mu[:, columns]), dtype=float)
