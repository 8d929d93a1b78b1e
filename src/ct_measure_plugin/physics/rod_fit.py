"""The least squares behind the CT-number line: rods, a line an energy, the best energy."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.rod_table import (
    ENERGIES_KEV,
    HALF_STEP_KEV,
    Rods,
    grid_mu,
    log_mu_of,
)

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import ArrayLike, NDArray

    FloatArray = NDArray[np.float64]

__all__ = [
    "LineFit",
    "ScaleFit",
    "best_correlation",
    "best_line",
    "best_scale",
    "energy_interval",
    "line_at",
]


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
        low, mid, high = (misfit(energy + step) for step in (-HALF_STEP_KEV, 0.0, HALF_STEP_KEV))
        curve = low - 2 * mid + high
        if curve <= 0:
            break
        step = float(np.clip(0.5 * HALF_STEP_KEV * (low - high) / curve, -1.0, 1.0))
        energy = float(np.clip(energy + step, ENERGIES_KEV[0], ENERGIES_KEV[-1]))
        if abs(step) < 1e-4:
            break
    return energy


def _line_curve(rods: Rods) -> FloatArray:
    """Return the chi-squared of the best line at every energy of the grid."""
    mu, hu = grid_mu(rods.log_mu), rods.hu[:, None]
    weight = 1.0 / rods.sigma(mu, 1000.0 / grid_mu(log_mu_of(rods.water)[None])) ** 2
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

    mu, water = grid_mu(rods.log_mu), grid_mu(log_mu_of(rods.water)[None])
    off = (rods.hu[:, None] - 1000.0 * (mu / water - 1.0)) / rods.sigma(mu, 1000.0 / water)
    energy = _valley(np.sum(off**2, axis=0))
    if energy is None:
        return None
    energy = _polish(lambda e: float(np.sum(residual(e) ** 2)), energy)
    sigma = rods.sigma(rods.mu(energy), 1000.0 / rods.water_mu(energy))
    low, high = (
        1000.0 * rods.mu(e) / rods.water_mu(e)
        for e in (energy - HALF_STEP_KEV, energy + HALF_STEP_KEV)
    )
    slope = (high - low) / (2 * HALF_STEP_KEV) / sigma
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

    curve = short_of_one(grid_mu(rods.log_mu))
    energy = _valley(curve)
    if energy is None:
        return None
    energy = _polish(lambda e: float(short_of_one(rods.mu(e))), energy)
    r = math.sqrt(max(0.0, 1.0 - float(short_of_one(rods.mu(energy)))))
    return energy, r, np.sqrt(np.clip(1.0 - curve, 0.0, 1.0))
