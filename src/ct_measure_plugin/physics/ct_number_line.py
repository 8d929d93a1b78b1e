"""The CT-number scale: CT number against attenuation, and the energy at which they agree best.

A scanner's CT numbers are a straight line in μ only at one photon energy. Rods of known composition
therefore tell two things at once: the line (is the scale right?) and the energy (what beam does the
scanner behave as?).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.attenuation import MATERIALS, Material
from ct_measure_plugin.physics.results import Caution, Curve, NotMeasured, Quantity, Result
from ct_measure_plugin.physics.rod_fit import (
    ENERGIES_KEV,
    LineFit,
    Rods,
    best_line,
    best_scale,
    mu_at,
    mu_of,
    steepness,
    water_mu,
)

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    FloatArray = NDArray[np.float64]

__all__ = ["CtNumberLine", "RodReading", "ct_number_line"]

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
    >>> round(found.effective_energy.value, 2), round(found.scale_factor.value, 4)
    (70.0, 1.0)
    """
    rods = Rods.checked(hu, materials, hu_uncertainty, density_uncertainty_g_cm3)
    refusal = _refusal(rods)
    if refusal is not None:
        return refusal
    fit = best_line(rods)
    scale = best_scale(rods)
    if fit is None or scale is None or fit.u_energy > VAGUEST_ENERGY_KEV:
        how = "" if fit is None else f" (uncertainty {fit.u_energy:.0f} keV)"
        return NotMeasured(
            f"these materials do not fix an effective energy{how}",
            f"add a rod of {_most_helpful(rods)}",
        )
    return _result(rods, fit, scale)


def _refusal(rods: Rods) -> NotMeasured | None:
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


def _most_helpful(rods: Rods) -> str:
    """Return the library's material that would fix the energy best, by the fit's covariance."""
    have = {m.composition for m in rods.materials}
    energy = 70.0
    slope = 1000.0 / float(water_mu(energy))
    best, least = "PTFE", math.inf
    for candidate in MATERIALS.values():
        if candidate.composition in have or candidate.name == "copper":
            continue
        mu, steep = mu_at(
            Rods(rods.hu, rods.u_hu, rods.u_rho, (*rods.materials, candidate), rods.table), energy
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
    distance = [abs(line[0] + line[1] * float(mu_of(m, energy)) - value) for m in candidates]
    nearest = candidates[int(np.argmin(distance))]
    return f"{nearest.density_g_cm3:g} g/cm³ {nearest.name}"


def _readings(rods: Rods, fit: LineFit) -> tuple[RodReading, ...]:
    residual = rods.hu - fit.parameters[0] - fit.parameters[1] * fit.mu
    found = []
    for k, entered in enumerate(rods.materials):
        sigma, reads_as = float(residual[k] / fit.sigma[k]), ""
        alone = best_line(rods.without(k)) if len(rods.hu) > FEWEST_MATERIALS else None
        if alone is not None:
            mu, steep = float(mu_of(entered, alone.energy)), steepness(entered, alone.energy)
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


def _cautions(rods: Rods, fit: LineFit, readings: tuple[RodReading, ...]) -> tuple[Caution, ...]:
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


def _result(rods: Rods, fit: LineFit, scale: tuple[float, float]) -> CtNumberLine:
    intercept, slope = (float(value) for value in fit.parameters)
    water = float(water_mu(fit.energy))
    steep = steepness(MATERIALS["water"], fit.energy)
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
