"""The CT-number scale: CT number against attenuation, and the energy at which they agree best.

A scanner's CT numbers are a straight line in μ only at one photon energy. Rods of known composition
therefore tell two things at once: the line (is the scale right?) and the energy (what beam does the
scanner behave as?).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.attenuation import MATERIALS, Material
from ct_measure_plugin.physics.results import Caution, Curve, NotMeasured, Quantity, Result

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    FloatArray = NDArray[np.float64]

__all__ = ["CtNumberLine", "RodReading", "ct_number_line"]

#: Energies searched, keV: below and above what any diagnostic beam behaves as.
ENERGIES_KEV = np.arange(30.0, 140.05, 0.5)

#: The finer grid on which attenuation is tabulated once a material and interpolated, keV.
_FINE_KEV = np.arange(ENERGIES_KEV[0] - 1.0, ENERGIES_KEV[-1] + 1.05, 0.1)

#: Fewer materials leave no residual to judge the line and the energy by.
FEWEST_MATERIALS = 4

#: A narrower span of CT numbers cannot fix a slope (methods of the trade; no standard).
NARROWEST_SPAN_HU = 500.0

#: An energy less certain than this says nothing about a beam.
VAGUEST_ENERGY_KEV = 10.0

#: Residual, in standard uncertainties, beyond which a rod is named. With ten rods drawn from a
#: normal distribution one in 1,600 lines would name one by chance.
OUTLIER_SIGMA = 4.0

#: Leverage beyond which one rod decides the line nearly alone.
DECIDING_LEVERAGE = 0.7

#: Probability of the misfit below which one energy is said not to describe the rods.
MISFIT_PROBABILITY = 0.01


@dataclass(frozen=True, slots=True)
class RodReading:
    """One rod: what it should be, what it read, and what the line leaves.

    Attributes
    ----------
    name : str
        The material it was entered as.
    read, expected, residual : Quantity
        CT number measured; on the line at the effective energy; their difference. HU.
    mu : Quantity
        Attenuation at the effective energy, cm⁻¹, with the density's uncertainty.
    sigma : float
        The residual in units of its own standard uncertainty.
    reads_as : str
        For an outlier, the material whose CT number it has; else "".
    """

    name: str
    read: Quantity
    expected: Quantity
    residual: Quantity
    mu: Quantity
    sigma: float
    reads_as: str = ""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CtNumberLine(Result):
    """The line, the energy, and every rod's residual.

    Attributes
    ----------
    effective_energy : Quantity
        Energy of the best straight line with slope and intercept free, keV.
    scale_energy : Quantity
        Energy at which the rods agree best with the definition of the HU scale, nothing else free,
        keV. Where the two differ, the scale itself is off.
    slope : Quantity
        HU per cm⁻¹; 1000/μ_w by definition.
    intercept : Quantity
        CT number at μ = 0, HU; -1000 by definition.
    scale_factor : Quantity
        slope · μ_w / 1000: 1 where the scale is right.
    water_offset : Quantity
        CT number of water on the line, HU; 0 where the scale is right.
    largest_residual : Quantity
        The largest distance of a rod from the line, HU.
    line, residuals, energy_curve : Curve
        CT number against μ; residual against μ; misfit (chi-squared) against energy.
    rods : tuple of RodReading
        One a rod, in the order given.
    """

    effective_energy: Quantity
    scale_energy: Quantity
    slope: Quantity
    intercept: Quantity
    scale_factor: Quantity
    water_offset: Quantity
    largest_residual: Quantity
    line: Curve
    residuals: Curve
    energy_curve: Curve
    rods: tuple[RodReading, ...] = field(default=())


def ct_number_line(
    hu: ArrayLike,
    materials: Sequence[Material],
    *,
    hu_uncertainty: ArrayLike,
    density_uncertainty_g_cm3: ArrayLike = 0.0,
) -> CtNumberLine | NotMeasured:
    """Fit CT numbers of known materials against their attenuation, and find the energy.

    Parameters
    ----------
    hu : array, shape (n,)
        CT number of each rod.
    materials : sequence of Material
        Composition and density of each.
    hu_uncertainty : array, shape (n,) or float
        Standard uncertainty of each CT number, HU, greater than 0.
    density_uncertainty_g_cm3 : array, shape (n,) or float
        Standard uncertainty of each density.

    Returns
    -------
    CtNumberLine or NotMeasured
        NotMeasured for fewer than four different materials, a span under 500 HU, or rods that do
        not fix an energy; the remedy names the material that would help most.

    Notes
    -----
    For every energy the line ``H = a + b μ(E)`` is fitted with weights ``1/u²``, ``u² = u_H² +
    (b μ/ρ u_ρ)²``; the energy of least chi-squared is refined on a parabola, and its uncertainty is
    that of the joint least-squares problem in a, b and E [1]_, [2]_.

    References
    ----------
    .. [1] M. R. Millner, W. H. Payne, R. G. Waggener et al., Med. Phys. 5 (1978) 543 (from memory):
       effective energy as that of best linear correlation.
    .. [2] JCGM 100:2008, H.3: a straight line fitted by least squares.

    Examples
    --------
    >>> names = ("air", "LDPE", "polystyrene", "PMMA", "POM", "PTFE")
    >>> rods = [MATERIALS[name] for name in names]
    >>> found = ct_number_line([rod.hu(70.0) for rod in rods], rods, hu_uncertainty=1.0)
    >>> round(found.effective_energy.value, 2), round(found.scale_factor.value, 6)
    (70.0, 1.0)
    """
    rods = _Rods.checked(hu, materials, hu_uncertainty, density_uncertainty_g_cm3)
    refusal = _refusal(rods)
    if refusal is not None:
        return refusal
    fit = _best_line(rods)
    scale = _best_scale(rods)
    if fit is None or scale is None or fit.u_energy > VAGUEST_ENERGY_KEV:
        how = "" if fit is None else f" (uncertainty {fit.u_energy:.0f} keV)"
        return NotMeasured(
            f"these materials do not fix an effective energy{how}",
            f"add a rod of {_most_helpful(rods)}",
        )
    return _result(rods, fit, scale)


def _water(energy: ArrayLike) -> FloatArray:
    return _mu(MATERIALS["water"], energy)


@dataclass(frozen=True, slots=True, eq=False)
class _Rods:
    hu: FloatArray
    u_hu: FloatArray
    u_rho: FloatArray
    materials: tuple[Material, ...]
    table: FloatArray  # (n, energies) of μ in cm⁻¹

    @classmethod
    def checked(
        cls, hu: ArrayLike, materials: Sequence[Material], u_hu: ArrayLike, u_rho: ArrayLike
    ) -> _Rods:
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
            np.stack([_mu(m, ENERGIES_KEV) for m in materials]) if len(values) else np.empty((0, 0))
        )
        return cls(values, doubt, density, tuple(materials), table)

    def without(self, k: int) -> _Rods:
        keep = np.arange(len(self.hu)) != k
        rest = tuple(m for i, m in enumerate(self.materials) if i != k)
        return _Rods(self.hu[keep], self.u_hu[keep], self.u_rho[keep], rest, self.table[keep])

    def sigma(self, mu: FloatArray, slope: float) -> FloatArray:
        """Return the standard uncertainty of each rod about the line, HU."""
        density = np.array([m.density_g_cm3 for m in self.materials])
        total: FloatArray = np.hypot(self.u_hu, slope * mu / density * self.u_rho)
        return total


def _refusal(rods: _Rods) -> NotMeasured | None:
    distinct = len({m.composition for m in rods.materials})
    if distinct < FEWEST_MATERIALS:
        return NotMeasured(
            f"{distinct} different materials were given; at least {FEWEST_MATERIALS} are needed",
            "measure more rods, for example water, LDPE, PMMA and PTFE",
        )
    span = float(np.ptp(rods.hu))
    if span < NARROWEST_SPAN_HU:
        return NotMeasured(
            f"the rods span {span:.0f} HU; at least {NARROWEST_SPAN_HU:.0f} are needed",
            "add air and a dense plastic such as PTFE",
        )
    return None


@dataclass(frozen=True, slots=True, eq=False)
class _Fit:
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


def _mu(entered: Material, energy: ArrayLike) -> FloatArray:
    """Return μ by interpolation of its logarithm, within 2e-6 of the table between its edges."""
    at = np.asarray(energy, dtype=float)
    return np.asarray(np.exp(np.interp(at, _FINE_KEV, _fine_log_mu(entered))), dtype=float)


def _mu_at(rods: _Rods, energy: float) -> tuple[FloatArray, FloatArray]:
    """Return μ of each rod and its derivative with energy."""
    mu = np.array([float(_mu(m, energy)) for m in rods.materials])
    return mu, np.array([_steepness(m, energy) for m in rods.materials])


def _steepness(entered: Material, energy: float) -> float:
    low, high = _mu(entered, [energy - 0.25, energy + 0.25])
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


def _polish(rods: _Rods, energy: float, *, scale_only: bool) -> float:
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


def _misfit(rods: _Rods, energy: float, *, scale_only: bool) -> float:
    mu, _ = _mu_at(rods, energy)
    slope = 1000.0 / float(_water(energy))
    sigma = rods.sigma(mu, slope)
    line = np.array([-1000.0, slope]) if scale_only else _weighted_line(mu, rods.hu, sigma)
    return float(np.sum(((rods.hu - line[0] - line[1] * mu) / sigma) ** 2))


def _curve(rods: _Rods) -> FloatArray:
    """Return the chi-squared of the best line at every energy of the grid."""
    mu, hu = rods.table, rods.hu[:, None]
    sigma = np.stack(
        [rods.sigma(mu[:, k], 1000.0 / w) for k, w in enumerate(_water(ENERGIES_KEV))], axis=1
    )
    weight = 1.0 / sigma**2
    total = weight.sum(axis=0)
    mean_mu, mean_hu = (weight * mu).sum(axis=0) / total, (weight * hu).sum(axis=0) / total
    along = (weight * (mu - mean_mu) ** 2).sum(axis=0)
    slope = (weight * (mu - mean_mu) * (hu - mean_hu)).sum(axis=0) / along
    misfit: FloatArray = (weight * (hu - mean_hu - slope * (mu - mean_mu)) ** 2).sum(axis=0)
    return misfit


def _best_line(rods: _Rods) -> _Fit | None:
    chi2 = _curve(rods)
    energy = _valley(chi2)
    if energy is None:
        return None
    energy = _polish(rods, energy, scale_only=False)
    mu, steep = _mu_at(rods, energy)
    sigma = rods.sigma(mu, 1000.0 / float(_water(energy)))
    line = _weighted_line(mu, rods.hu, sigma)
    jacobian = np.stack([np.ones_like(mu), mu, line[1] * steep], axis=1) / sigma[:, None]
    normal = jacobian.T @ jacobian
    if np.linalg.cond(normal) > 1e14:
        return None
    covariance = np.asarray(np.linalg.inv(normal), dtype=float)
    two = jacobian[:, :2]
    leverage = np.einsum("ij,jk,ik->i", two, np.linalg.inv(two.T @ two), two)
    return _Fit(energy, math.sqrt(covariance[2, 2]), line, covariance, chi2, mu, sigma, leverage)


def _best_scale(rods: _Rods) -> tuple[float, float] | None:
    """Return the energy of best agreement with the HU definition, and its uncertainty."""
    water = _water(ENERGIES_KEV)
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
        [np.diff(1000.0 * _mu(m, near) / _water(near))[0] / 0.5 for m in rods.materials]
    )
    mu, _ = _mu_at(rods, energy)
    spread = rods.sigma(mu, 1000.0 / float(_water(energy)))
    return energy, 1.0 / math.sqrt(float(np.sum((slope / spread) ** 2)))


def _most_helpful(rods: _Rods) -> str:
    """Return the library's material that would fix the energy best, by the fit's covariance."""
    have = {m.composition for m in rods.materials}
    energy = 70.0
    slope = 1000.0 / float(_water(energy))
    best, least = "PTFE", math.inf
    for candidate in MATERIALS.values():
        if candidate.composition in have or candidate.name == "copper":
            continue
        mu, steep = _mu_at(
            _Rods(rods.hu, rods.u_hu, rods.u_rho, (*rods.materials, candidate), rods.table), energy
        )
        doubt = np.append(rods.u_hu, float(np.median(rods.u_hu)))
        jacobian = np.stack([np.ones_like(mu), mu, slope * steep], axis=1) / doubt[:, None]
        normal = jacobian.T @ jacobian
        spread = float(np.linalg.pinv(normal)[2, 2])
        if spread < least:
            best, least = candidate.name, spread
    return best


def _reads_as(value: float, line: FloatArray, energy: float, entered: Material) -> str:
    """Return the library's material whose CT number on this line lies nearest to a reading."""
    candidates = [m for m in MATERIALS.values() if m.composition != entered.composition]
    distance = [abs(line[0] + line[1] * float(_mu(m, energy)) - value) for m in candidates]
    nearest = candidates[int(np.argmin(distance))]
    return f"{nearest.density_g_cm3:g} g/cm³ {nearest.name}"


def _readings(rods: _Rods, fit: _Fit) -> tuple[RodReading, ...]:
    residual = rods.hu - fit.parameters[0] - fit.parameters[1] * fit.mu
    found = []
    for k, entered in enumerate(rods.materials):
        sigma, reads_as = float(residual[k] / fit.sigma[k]), ""
        alone = _best_line(rods.without(k)) if len(rods.hu) > FEWEST_MATERIALS else None
        if alone is not None:
            mu, steep = float(_mu(entered, alone.energy)), _steepness(entered, alone.energy)
            own = rods.sigma(fit.mu, float(alone.parameters[1]))[k]
            row = np.array([1.0, mu, float(alone.parameters[1]) * steep])
            spread = math.sqrt(own**2 + float(row @ alone.covariance @ row))
            sigma = float(rods.hu[k] - alone.parameters[0] - alone.parameters[1] * mu) / spread
            if abs(sigma) > OUTLIER_SIGMA:
                reads_as = _reads_as(rods.hu[k], alone.parameters, alone.energy, entered)
        expected = float(rods.hu[k] - residual[k])
        density_part = fit.mu[k] / entered.density_g_cm3 * rods.u_rho[k]
        found.append(
            RodReading(
                entered.name,
                Quantity(float(rods.hu[k]), "HU", float(rods.u_hu[k])),
                Quantity(expected, "HU", float(fit.parameters[1] * density_part)),
                Quantity(float(residual[k]), "HU", float(fit.sigma[k])),
                Quantity(float(fit.mu[k]), "cm⁻¹", float(density_part)),
                sigma,
                reads_as,
            )
        )
    return _only_the_worst(found)


def _only_the_worst(found: list[RodReading]) -> tuple[RodReading, ...]:
    """Name only the rod farthest out: one wrong rod pulls the line and drags others with it."""
    worst = max(range(len(found)), key=lambda k: abs(found[k].sigma))
    return tuple(
        rod
        if k == worst
        else RodReading(rod.name, rod.read, rod.expected, rod.residual, rod.mu, rod.sigma)
        for k, rod in enumerate(found)
    )


def _cautions(rods: _Rods, fit: _Fit, readings: tuple[RodReading, ...]) -> tuple[Caution, ...]:
    from scipy import stats

    found = []
    for number, rod in enumerate(readings, start=1):
        if rod.reads_as:
            found.append(
                Caution(
                    "rod-reads-as-another",
                    f"Rod {number} reads as {rod.reads_as}, entered as {rod.name}"
                    f" ({rod.sigma:+.0f} standard uncertainties from the others' line).",
                    "Check which rod it is, and its density.",
                )
            )
    degrees = len(rods.hu) - 3
    least = float(
        np.sum(((rods.hu - fit.parameters[0] - fit.parameters[1] * fit.mu) / fit.sigma) ** 2)
    )
    if degrees > 0 and stats.chi2.sf(least, degrees) < MISFIT_PROBABILITY:
        found.append(
            Caution(
                "one-energy-fails",
                f"No single energy describes the rods: chi-squared {least:.0f} for {degrees}"
                " degrees of freedom.",
                "Leave out materials of high atomic number, or check densities: a beam of many"
                " energies hardens on its way through dense rods.",
            )
        )
    k = int(np.argmax(fit.leverage))
    if fit.leverage[k] > DECIDING_LEVERAGE:
        found.append(
            Caution(
                "one-rod-decides",
                f"The {rods.materials[k].name} rod decides the line nearly alone (leverage"
                f" {fit.leverage[k]:.2f}).",
                "Judge by the residuals, not by a correlation coefficient.",
            )
        )
    return tuple(found)


def _result(rods: _Rods, fit: _Fit, scale: tuple[float, float]) -> CtNumberLine:
    intercept, slope = (float(value) for value in fit.parameters)
    water = float(_water(fit.energy))
    steep = _steepness(MATERIALS["water"], fit.energy)
    rows = {
        "scale": np.array([0.0, water, slope * steep]) / 1000.0,
        "offset": np.array([1.0, water, slope * steep]),
    }
    u = {key: math.sqrt(float(row @ fit.covariance @ row)) for key, row in rows.items()}
    readings = _readings(rods, fit)
    residual = rods.hu - intercept - slope * fit.mu
    order = np.argsort(fit.mu)
    worst = int(np.argmax(np.abs(residual)))
    return CtNumberLine(
        effective_energy=Quantity(fit.energy, "keV", fit.u_energy),
        scale_energy=Quantity(scale[0], "keV", scale[1]),
        slope=Quantity(slope, "HU cm", math.sqrt(fit.covariance[1, 1])),
        intercept=Quantity(intercept, "HU", math.sqrt(fit.covariance[0, 0])),
        scale_factor=Quantity(slope * water / 1000.0, "", u["scale"]),
        water_offset=Quantity(intercept + slope * water, "HU", u["offset"]),
        largest_residual=Quantity(abs(float(residual[worst])), "HU", float(fit.sigma[worst])),
        line=Curve(fit.mu[order], rods.hu[order], fit.sigma[order], "μ", "cm⁻¹", "CT number", "HU"),
        residuals=Curve(
            fit.mu[order], residual[order], fit.sigma[order], "μ", "cm⁻¹", "Residual", "HU"
        ),
        energy_curve=Curve(ENERGIES_KEV, fit.chi2, None, "Energy", "keV", "Chi-squared", ""),
        rods=readings,
        cautions=_cautions(rods, fit, readings),
    )
