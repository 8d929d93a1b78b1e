"""The least squares behind the CT-number line: rods, a line an energy, the best energy."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.attenuation import MATERIALS, Material

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from numpy.typing import ArrayLike, NDArray

    FloatArray = NDArray[np.float64]

__all__ = [
    "ENERGIES_KEV",
    "LineFit",
    "Rods",
    "ScaleFit",
    "best_correlation",
    "best_line",
    "best_scale",
    "energy_interval",
    "line_at",
]

#: Energies searched, keV: below and above what any diagnostic beam behaves as.
ENERGIES_KEV = np.arange(30.0, 140.05, 0.5)

#: The finer grid on which attenuation is tabulated once a material and interpolated, keV.
_FINE_KEV = np.arange(ENERGIES_KEV[0] - 1.0, ENERGIES_KEV[-1] + 1.05, 0.1)
_PER_KEV = 10.0

#: Half the step of derivatives with energy, keV.
_HALF = 0.25


@lru_cache(maxsize=512)
def _log_mu(entered: Material) -> FloatArray:
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
        table = [_log_mu(m) for m in materials]
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
        return float(_at(_log_mu(self.water)[None], energy)[0])

    def steepness(self, energy: float) -> FloatArray:
        """Return dμ/dE of each rod, cm⁻¹ per keV."""
        slope: FloatArray = (self.mu(energy + _HALF) - self.mu(energy - _HALF)) / (2 * _HALF)
        return slope

    def sigma(self, mu: FloatArray, slope: FloatArray | float) -> FloatArray:
        """Return the standard uncertainty of each rod about the line, HU; energies go last."""
        shape = (-1, *(1,) * (mu.ndim - 1))
        share = (self.u_density / self.density).reshape(shape)
        total: FloatArray = np.hypot(self.u_hu.reshape(shape), slope * mu * share)
        return total


@dataclass(frozen=True, slots=True, eq=False)
class LineFit:
    """The best line: its energy, intercept and slope, and the covariance of the three.

    Attributes
    ----------
    energy, u_energy : float
        keV.
    parameters : ndarray, shape (2,)
        Intercept in HU, slope in HU cm.
    covariance : ndarray, shape (3, 3)
        Of intercept, slope and energy.
    at_energy : ndarray, shape (2, 2)
        Covariance of intercept and slope where the energy is held.
    chi2 : ndarray
        Over :data:`ENERGIES_KEV`.
    least : float
        Chi-squared of the best line.
    mu, sigma, leverage : ndarray, shape (n,)
        Of each rod at the best energy.
    """

    energy: float
    u_energy: float
    parameters: FloatArray
    covariance: FloatArray
    at_energy: FloatArray
    chi2: FloatArray
    least: float
    mu: FloatArray
    sigma: FloatArray
    leverage: FloatArray

    def at(self, mu: ArrayLike) -> FloatArray:
        """Return the line's CT number at μ in cm⁻¹."""
        height: FloatArray = self.parameters[0] + self.parameters[1] * np.asarray(mu, dtype=float)
        return height

    def widened(self, factor: float) -> LineFit:
        """Return the fit with its uncertainties multiplied."""
        return replace(
            self,
            u_energy=self.u_energy * factor,
            covariance=self.covariance * factor**2,
            at_energy=self.at_energy * factor**2,
        )


@dataclass(frozen=True, slots=True)
class ScaleFit:
    """The energy of best agreement with the HU definition, keV, and its chi-squared."""

    energy: float
    u_energy: float
    least: float


def _at(log_mu: FloatArray, energy: float) -> FloatArray:
    place = (energy - _FINE_KEV[0]) * _PER_KEV
    k = min(max(int(place), 0), log_mu.shape[1] - 2)
    share = place - k
    found: FloatArray = np.exp((1 - share) * log_mu[:, k] + share * log_mu[:, k + 1])
    return found


def _table(log_mu: FloatArray) -> FloatArray:
    """Return μ on the grid of energies, shape (n, energies)."""
    step = round(float(ENERGIES_KEV[1] - ENERGIES_KEV[0]) * _PER_KEV)
    first = round(float(ENERGIES_KEV[0] - _FINE_KEV[0]) * _PER_KEV)
    columns = first + step * np.arange(len(ENERGIES_KEV))
    return np.asarray(np.exp(log_mu[:, columns]), dtype=float)


def line_at(rods: Rods, energy: float) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return the weighted line at one energy: (intercept, slope), residuals, sigmas."""
    mu = rods.mu(energy)
    sigma = rods.sigma(mu, 1000.0 / rods.water_mu(energy))
    weight = 1.0 / sigma**2
    weight /= weight.sum()
    x, y = mu - weight @ mu, rods.hu - weight @ rods.hu
    slope = float((weight * x) @ y / ((weight * x) @ x))
    intercept = float(weight @ rods.hu - slope * (weight @ mu))
    return np.array([intercept, slope]), y - slope * x, sigma


def _valley(misfit: FloatArray) -> float | None:
    """Return the energy of the lowest misfit, refined on a parabola; None at the grid's end."""
    k = int(np.argmin(misfit))
    if k in (0, len(misfit) - 1):
        return None
    low, mid, high = misfit[k - 1 : k + 2]
    curve = low - 2 * mid + high
    step = 0.0 if curve <= 0 else 0.5 * (low - high) / curve
    return float(ENERGIES_KEV[k] + step * (ENERGIES_KEV[1] - ENERGIES_KEV[0]))


def _polish(misfit: Callable[[float], float], energy: float) -> float:
    """Newton steps on the misfit around the grid's valley."""
    for _ in range(6):
        low, mid, high = (misfit(energy + step) for step in (-_HALF, 0.0, _HALF))
        curve = low - 2 * mid + high
        if curve <= 0:
            break
        step = float(np.clip(0.5 * _HALF * (low - high) / curve, -1.0, 1.0))
        energy = float(np.clip(energy + step, ENERGIES_KEV[0], ENERGIES_KEV[-1]))
        if abs(step) < 1e-4:
            break
    return energy


def _line_curve(rods: Rods) -> FloatArray:
    """Return the chi-squared of the best line at every energy of the grid."""
    mu, hu = _table(rods.log_mu), rods.hu[:, None]
    weight = 1.0 / rods.sigma(mu, 1000.0 / _table(_log_mu(rods.water)[None])) ** 2
    total = weight.sum(axis=0)
    mean_mu, mean_hu = (weight * mu).sum(axis=0) / total, (weight * hu).sum(axis=0) / total
    along = (weight * (mu - mean_mu) ** 2).sum(axis=0)
    slope = (weight * (mu - mean_mu) * (hu - mean_hu)).sum(axis=0) / along
    misfit: FloatArray = (weight * (hu - mean_hu - slope * (mu - mean_mu)) ** 2).sum(axis=0)
    return misfit


def best_line(rods: Rods) -> LineFit | None:
    """Return the line and energy of least chi-squared, None if the rods fix none."""

    def misfit(energy: float) -> float:
        _, residual, sigma = line_at(rods, energy)
        return float(np.sum((residual / sigma) ** 2))

    chi2 = _line_curve(rods)
    energy = _valley(chi2)
    if energy is None:
        return None
    energy = _polish(misfit, energy)
    line, residual, sigma = line_at(rods, energy)
    mu = rods.mu(energy)
    design = np.stack([np.ones_like(mu), mu, line[1] * rods.steepness(energy)], axis=1)
    jacobian = design / sigma[:, None]
    normal = jacobian.T @ jacobian
    if not np.linalg.cond(normal) < 1e14:
        return None
    covariance = np.asarray(np.linalg.inv(normal), dtype=float)
    at_energy = np.asarray(np.linalg.inv(normal[:2, :2]), dtype=float)
    two = jacobian[:, :2]
    return LineFit(
        energy=energy,
        u_energy=math.sqrt(covariance[2, 2]),
        parameters=line,
        covariance=covariance,
        at_energy=at_energy,
        chi2=chi2,
        least=float(np.sum((residual / sigma) ** 2)),
        mu=mu,
        sigma=sigma,
        leverage=np.einsum("ij,jk,ik->i", two, at_energy, two),
    )


def energy_interval(fit: LineFit, surplus: float = 1.0) -> tuple[float | None, float | None]:
    """Return the energies between which the misfit stays within 95 % of its least value.

    That is chi-squared up to 3.84 (times the square of `surplus`) above its least, [1]_; None for
    an end that lies outside the energies searched.

    References
    ----------
    .. [1] W. T. Eadie et al., Statistical Methods in Experimental Physics, 1971, 9.3 (from memory):
       intervals from the likelihood ratio.
    """
    limit = 1.96 * surplus
    place = int(np.searchsorted(ENERGIES_KEV, fit.energy))
    energies = np.insert(ENERGIES_KEV, place, fit.energy)
    root = np.sqrt(np.maximum(np.insert(fit.chi2, place, fit.least) - fit.least, 0.0))
    below, above = np.flatnonzero(root[:place] > limit), np.flatnonzero(root[place:] > limit)

    def crossing(inner: int, outer: int) -> float:
        return float(np.interp(limit, root[[inner, outer]], energies[[inner, outer]]))

    low = crossing(below[-1] + 1, below[-1]) if len(below) else None
    high = crossing(place + above[0] - 1, place + above[0]) if len(above) else None
    return low, high


def best_scale(rods: Rods) -> ScaleFit | None:
    """Return the energy of best agreement with the HU definition, None if there is none."""

    def residual(energy: float) -> FloatArray:
        mu, water = rods.mu(energy), rods.water_mu(energy)
        off: FloatArray = (rods.hu - 1000.0 * (mu / water - 1.0)) / rods.sigma(mu, 1000.0 / water)
        return off

    mu, water = _table(rods.log_mu), _table(_log_mu(rods.water)[None])
    off = (rods.hu[:, None] - 1000.0 * (mu / water - 1.0)) / rods.sigma(mu, 1000.0 / water)
    energy = _valley(np.sum(off**2, axis=0))
    if energy is None:
        return None
    energy = _polish(lambda e: float(np.sum(residual(e) ** 2)), energy)
    sigma = rods.sigma(rods.mu(energy), 1000.0 / rods.water_mu(energy))
    low, high = (1000.0 * rods.mu(e) / rods.water_mu(e) for e in (energy - _HALF, energy + _HALF))
    slope = (high - low) / (2 * _HALF) / sigma
    total = float(np.sum(slope**2))
    if not total > 0:
        return None
    return ScaleFit(energy, 1.0 / math.sqrt(total), float(np.sum(residual(energy) ** 2)))


def best_correlation(rods: Rods) -> tuple[float, float, FloatArray] | None:
    """Return the energy of the largest correlation of CT number and μ, r there, and r over energy.

    Every rod counts alike, whatever its uncertainty.
    """

    def short_of_one(mu: FloatArray) -> FloatArray:
        x = mu - mu.mean(axis=0)
        y = (rods.hu - rods.hu.mean()).reshape(-1, *(1,) * (mu.ndim - 1))
        slope = (x * y).sum(axis=0) / (x**2).sum(axis=0)
        lost: FloatArray = ((y - slope * x) ** 2).sum(axis=0) / (y**2).sum(axis=0)
        return lost  # 1 - r², without the cancellation

    curve = short_of_one(_table(rods.log_mu))
    energy = _valley(curve)
    if energy is None:
        return None
    energy = _polish(lambda e: float(short_of_one(rods.mu(e))), energy)
    r = math.sqrt(max(0.0, 1.0 - float(short_of_one(rods.mu(energy)))))
    return energy, r, np.sqrt(np.clip(1.0 - curve, 0.0, 1.0))
