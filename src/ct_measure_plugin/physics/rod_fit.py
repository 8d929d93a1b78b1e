"""The least squares behind the CT-number line: rods, a line an energy, the best energy."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.attenuation import MATERIALS, Material

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    FloatArray = NDArray[np.float64]

__all__ = [
    "ENERGIES_KEV",
    "LineFit",
    "Rods",
    "best_line",
    "best_scale",
    "mu_at",
    "mu_of",
    "steepness",
    "water_mu",
]

#: Energies searched, keV: below and above what any diagnostic beam behaves as.
ENERGIES_KEV = np.arange(30.0, 140.05, 0.5)

#: The finer grid on which attenuation is tabulated once a material and interpolated, keV.
_FINE_KEV = np.arange(ENERGIES_KEV[0] - 1.0, ENERGIES_KEV[-1] + 1.05, 0.1)


def water_mu(energy: ArrayLike) -> FloatArray:
    """Return μ of water in cm⁻¹ at energies in keV."""
    return mu_of(MATERIALS["water"], energy)


@dataclass(frozen=True, slots=True, eq=False)
class Rods:
    """Rods with what they read, what they are, and their μ on the grid of energies."""

    hu: FloatArray
    u_hu: FloatArray
    u_rho: FloatArray
    materials: tuple[Material, ...]
    table: FloatArray  # (n, energies) of μ in cm⁻¹

    @classmethod
    def checked(
        cls, hu: ArrayLike, materials: Sequence[Material], u_hu: ArrayLike, u_rho: ArrayLike
    ) -> Rods:
        """Return the rods with the absorption table of each, after checking what was given."""
        values = np.asarray(hu, dtype=float).ravel()
        if len(values) != len(materials):
            raise ArgumentError("materials", f"must name {len(values)} rods", len(materials))
        doubt = np.broadcast_to(np.asarray(u_hu, dtype=float), values.shape)
        if not bool(np.all(doubt > 0)):
            raise ArgumentError("hu_uncertainty", "must be greater than 0", u_hu)
        density = np.broadcast_to(np.asarray(u_rho, dtype=float), values.shape)
        if not bool(np.all(density >= 0)):
            raise ArgumentError("density_uncertainty_g_cm3", "must not be negative", u_rho)
        table = (
            np.stack([mu_of(m, ENERGIES_KEV) for m in materials])
            if len(values)
            else np.empty((0, 0))
        )
        return cls(values, doubt, density, tuple(materials), table)

    def without(self, k: int) -> Rods:
        """Return the rods but the k-th."""
        keep = np.arange(len(self.hu)) != k
        rest = tuple(m for i, m in enumerate(self.materials) if i != k)
        return Rods(self.hu[keep], self.u_hu[keep], self.u_rho[keep], rest, self.table[keep])

    def sigma(self, mu: FloatArray, slope: float) -> FloatArray:
        """Return the standard uncertainty of each rod about the line, HU."""
        density = np.array([m.density_g_cm3 for m in self.materials])
        total: FloatArray = np.hypot(self.u_hu, slope * mu / density * self.u_rho)
        return total


@dataclass(frozen=True, slots=True, eq=False)
class LineFit:
    """The best line: its energy, intercept and slope, and the covariance of the three."""

    energy: float
    u_energy: float
    parameters: FloatArray  # intercept, slope
    covariance: FloatArray  # of intercept, slope, energy
    chi2: FloatArray  # over ENERGIES_KEV
    mu: FloatArray
    sigma: FloatArray
    leverage: FloatArray


@lru_cache(maxsize=256)
def _fine_log_mu(entered: Material) -> FloatArray:
    return np.log(entered.mu(_FINE_KEV))


def mu_of(entered: Material, energy: ArrayLike) -> FloatArray:
    """Return μ by interpolation of its logarithm, within 2e-6 of the table between its edges."""
    at = np.asarray(energy, dtype=float)
    return np.asarray(np.exp(np.interp(at, _FINE_KEV, _fine_log_mu(entered))), dtype=float)


def mu_at(rods: Rods, energy: float) -> tuple[FloatArray, FloatArray]:
    """Return μ of each rod and its derivative with energy."""
    mu = np.array([float(mu_of(m, energy)) for m in rods.materials])
    return mu, np.array([steepness(m, energy) for m in rods.materials])


def steepness(entered: Material, energy: float) -> float:
    """Return dμ/dE in cm⁻¹ per keV."""
    low, high = mu_of(entered, [energy - 0.25, energy + 0.25])
    return float(high - low) / 0.5


def _weighted_line(mu: FloatArray, hu: FloatArray, sigma: FloatArray) -> FloatArray:
    design = np.stack([np.ones_like(mu), mu], axis=1) / sigma[:, None]
    return np.asarray(np.linalg.lstsq(design, hu / sigma, rcond=None)[0], dtype=float)


def _valley(chi2: FloatArray) -> float | None:
    """Return the energy of the lowest misfit, refined on a parabola; None at the grid's end."""
    k = int(np.argmin(chi2))
    if k in (0, len(chi2) - 1):
        return None
    low, mid, high = chi2[k - 1 : k + 2]
    curve = low - 2 * mid + high
    step = 0.0 if curve <= 0 else 0.5 * (low - high) / curve
    return float(ENERGIES_KEV[k] + step * (ENERGIES_KEV[1] - ENERGIES_KEV[0]))


def _polish(rods: Rods, energy: float, *, scale_only: bool) -> float:
    """Newton steps on the misfit around the grid's valley."""
    for _ in range(4):
        near = energy + np.array([-0.25, 0.0, 0.25])
        misfit = np.array([_misfit(rods, e, scale_only=scale_only) for e in near])
        curve = misfit[0] - 2 * misfit[1] + misfit[2]
        if curve <= 0:
            break
        step = float(np.clip(0.125 * (misfit[0] - misfit[2]) / curve, -1.0, 1.0))
        energy = float(np.clip(energy + step, ENERGIES_KEV[0], ENERGIES_KEV[-1]))
        if abs(step) < 1e-4:
            break
    return energy


def _misfit(rods: Rods, energy: float, *, scale_only: bool) -> float:
    mu, _ = mu_at(rods, energy)
    slope = 1000.0 / float(water_mu(energy))
    sigma = rods.sigma(mu, slope)
    line = np.array([-1000.0, slope]) if scale_only else _weighted_line(mu, rods.hu, sigma)
    return float(np.sum(((rods.hu - line[0] - line[1] * mu) / sigma) ** 2))


def _curve(rods: Rods) -> FloatArray:
    """Return the chi-squared of the best line at every energy of the grid."""
    mu, hu = rods.table, rods.hu[:, None]
    sigma = np.stack(
        [rods.sigma(mu[:, k], 1000.0 / w) for k, w in enumerate(water_mu(ENERGIES_KEV))], axis=1
    )
    weight = 1.0 / sigma**2
    total = weight.sum(axis=0)
    mean_mu, mean_hu = (weight * mu).sum(axis=0) / total, (weight * hu).sum(axis=0) / total
    along = (weight * (mu - mean_mu) ** 2).sum(axis=0)
    slope = (weight * (mu - mean_mu) * (hu - mean_hu)).sum(axis=0) / along
    misfit: FloatArray = (weight * (hu - mean_hu - slope * (mu - mean_mu)) ** 2).sum(axis=0)
    return misfit


def best_line(rods: Rods) -> LineFit | None:
    """Return the line and energy of least misfit, None if the rods fix none."""
    chi2 = _curve(rods)
    energy = _valley(chi2)
    if energy is None:
        return None
    energy = _polish(rods, energy, scale_only=False)
    mu, steep = mu_at(rods, energy)
    sigma = rods.sigma(mu, 1000.0 / float(water_mu(energy)))
    line = _weighted_line(mu, rods.hu, sigma)
    jacobian = np.stack([np.ones_like(mu), mu, line[1] * steep], axis=1) / sigma[:, None]
    normal = jacobian.T @ jacobian
    if np.linalg.cond(normal) > 1e14:
        return None
    covariance = np.asarray(np.linalg.inv(normal), dtype=float)
    two = jacobian[:, :2]
    leverage = np.einsum("ij,jk,ik->i", two, np.linalg.inv(two.T @ two), two)
    return LineFit(energy, math.sqrt(covariance[2, 2]), line, covariance, chi2, mu, sigma, leverage)


def best_scale(rods: Rods) -> tuple[float, float] | None:
    """Return the energy of best agreement with the HU definition, and its uncertainty."""
    water = water_mu(ENERGIES_KEV)
    expected = 1000.0 * (rods.table / water - 1.0)
    sigma = np.stack(
        [rods.sigma(rods.table[:, k], 1000.0 / w) for k, w in enumerate(water)], axis=1
    )
    energy = _valley(np.sum(((rods.hu[:, None] - expected) / sigma) ** 2, axis=0))
    if energy is None:
        return None
    energy = _polish(rods, energy, scale_only=True)
    near = energy + np.array([-0.25, 0.25])
    slope = np.array(
        [np.diff(1000.0 * mu_of(m, near) / water_mu(near))[0] / 0.5 for m in rods.materials]
    )
    mu, _ = mu_at(rods, energy)
    spread = rods.sigma(mu, 1000.0 / float(water_mu(energy)))
    return energy, 1.0 / math.sqrt(float(np.sum((slope / spread) ** 2)))
