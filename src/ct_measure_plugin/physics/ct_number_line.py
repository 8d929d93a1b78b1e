"""The CT-number scale: CT number against attenuation, and the energy at which they agree best.

A scanner's CT numbers are a straight line in μ only at one photon energy. Rods of known composition
therefore tell two things at once: the line (is the scale right?) and the energy (what beam does the
scanner behave as?).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.attenuation import MATERIALS, Material
from ct_measure_plugin.physics.results import Caution, Curve, NotMeasured, Quantity, Result
from ct_measure_plugin.physics.rod_advice import VAGUEST_ENERGY_KEV, refusal_of, too_vague
from ct_measure_plugin.physics.rod_cautions import cautions_of, surplus_of
from ct_measure_plugin.physics.rod_fit import (
    LineFit,
    ScaleFit,
    best_correlation,
    best_line,
    best_scale,
    energy_interval,
)
from ct_measure_plugin.physics.rod_layout import PlacedRod
from ct_measure_plugin.physics.rod_readings import RodReading, readings_of
from ct_measure_plugin.physics.rod_table import ENERGIES_KEV, Rods

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike

__all__ = ["CtNumberLine", "PlacedRod", "RodReading", "ct_number_line"]

#: Points of the drawn line.
_LINE_POINTS = 101


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CtNumberLine(Result):
    """The line, the energy, and every rod's residual.

    Attributes
    ----------
    effective_energy : Quantity
        Energy of the best straight line, rods weighted by their uncertainty, keV.
    energy_low, energy_high : Quantity or None
        Ends of the 95 % interval of the effective energy, keV; it is not symmetric where the energy
        is uncertain, because μ changes less at higher energies. None for an end beyond 30 or
        140 keV.
    correlation_energy : Quantity or None
        Energy of the largest correlation of CT number and μ, every rod counting alike, keV.
    scale_energy : Quantity or None
        Energy at which the rods agree best with the definition of the HU scale, nothing else free,
        keV. Where it differs from the effective energy, the scale itself is off.
    beam_energy, beam_water_energy : Quantity or None
        What the beam's quality predicts (tube voltage with half-value layer or filtration), where
        that was given: the effective energy of these rods, and the energy at which μ of water
        equals its mean over the beam, keV.
    slope : Quantity
        HU per cm⁻¹; 1000/μ_w by definition.
    intercept : Quantity
        CT number at μ = 0, HU; -1000 by definition.
    contrast_scale : Quantity
        μ per HU, cm⁻¹/HU: the inverse of the slope.
    scale_factor : Quantity
        slope · μ_w / 1000: 1 where the scale is right.
    water_equivalent_factor : Quantity
        The μ that reads 0 HU, over μ_w: 1 where the scale is right.
    water_offset : Quantity
        CT number of water on the line, HU; 0 where the scale is right.
    largest_residual : Quantity
        The largest distance of a rod from the line, HU.
    correlation : Quantity or None
        Pearson's r of CT number and μ at the correlation energy.
    reduced_chi_squared : Quantity
        Chi-squared of the line over its degrees of freedom; 1 is expected.
    line : Curve
        The fitted line against μ at the effective energy, with its standard uncertainty; its `data`
        are the CT numbers read.
    residuals : Curve
        Distance from the line against μ.
    energy_curve, correlation_curve : Curve
        Misfit of the best line (the root of chi-squared per degree of freedom), and the
        correlation, at every energy.
    rods : tuple of RodReading
        One a rod, in the order given.
    layout_rotation, layout_scale : Quantity or None
        By what a layout that found the rods is turned, and distances over its own.
    places : tuple of PlacedRod
        Where it found them.
    """

    effective_energy: Quantity
    energy_low: Quantity | None
    energy_high: Quantity | None
    correlation_energy: Quantity | None
    scale_energy: Quantity | None
    beam_energy: Quantity | None = None
    beam_water_energy: Quantity | None = None
    slope: Quantity
    intercept: Quantity
    contrast_scale: Quantity
    scale_factor: Quantity
    water_equivalent_factor: Quantity
    water_offset: Quantity
    largest_residual: Quantity
    correlation: Quantity | None
    reduced_chi_squared: Quantity
    line: Curve
    residuals: Curve
    energy_curve: Curve
    correlation_curve: Curve | None
    rods: tuple[RodReading, ...] = ()
    layout_rotation: Quantity | None = None
    layout_scale: Quantity | None = None
    places: tuple[PlacedRod, ...] = ()


def ct_number_line(
    hu: ArrayLike,
    materials: Sequence[Material],
    *,
    hu_uncertainty: ArrayLike,
    density_uncertainty_g_cm3: ArrayLike | None = None,
    names: Sequence[str] | None = None,
    library: Sequence[Material] | None = None,
    water: Material | None = None,
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
    density_uncertainty_g_cm3 : array, shape (n,) or float, optional
        Standard uncertainty of each density; by default the materials' own.
    names : sequence of str, optional
        What the rods are called; by default by their material.
    library : sequence of Material, optional
        Materials that an outlier is compared with and that may be recommended.
    water : Material, optional
        What the scale takes for water; by default of density 1 g/cm³.

    Returns
    -------
    CtNumberLine or NotMeasured
        NotMeasured for fewer than four different materials, a span under 500 HU, or rods that do
        not fix an energy; the remedy names the material that would help most.

    Raises
    ------
    ArgumentError
        If the numbers of rods disagree or an uncertainty is out of range.

    Notes
    -----
    For every energy the line ``H = a + b μ(E)`` is fitted with weights ``1/u²``, ``u² = u_H² +
    (b μ/ρ u_ρ)²``; the energy of least chi-squared is refined, and its uncertainty is that of the
    joint least-squares problem in a, b and E [1]_, [2]_. Where chi-squared is too large for chance
    (1 %), all uncertainties are multiplied by the root of chi-squared per degree of freedom.

    References
    ----------
    .. [1] M. R. Millner, W. H. Payne, R. G. Waggener et al., Med. Phys. 5 (1978) 543 (from memory):
       effective energy as that of best linear correlation.
    .. [2] JCGM 100:2008, H.3: a straight line fitted by least squares.

    Examples
    --------
    >>> rods = [MATERIALS[name] for name in ("air", "LDPE", "polystyrene", "PMMA", "POM", "PTFE")]
    >>> found = ct_number_line([rod.hu(70.0) for rod in rods], rods, hu_uncertainty=1.0)
    >>> round(found.effective_energy.value, 2), round(found.scale_factor.value, 4)
    (70.0, 1.0)
    """
    listed = tuple(MATERIALS.values()) if library is None else tuple(library)
    rods = Rods.checked(hu, materials, hu_uncertainty, density_uncertainty_g_cm3, water)
    called = [m.name for m in rods.materials] if names is None else list(names)
    if len(called) != len(rods.hu):
        raise ArgumentError("names", f"must name {len(rods.hu)} rods", len(called))
    refusal = refusal_of(rods, listed)
    if refusal is not None:
        return refusal
    fit = best_line(rods)
    if fit is None or fit.u_energy > VAGUEST_ENERGY_KEV:
        return too_vague(rods, listed, None if fit is None else fit.u_energy)
    readings = readings_of(rods, fit, called, listed)
    scale = best_scale(rods)
    cautions = cautions_of(rods, fit, scale, readings)
    return _result(rods, fit, scale, readings.rods, cautions)


def _result(
    rods: Rods,
    fit: LineFit,
    scale: ScaleFit | None,
    readings: tuple[RodReading, ...],
    cautions: tuple[Caution, ...],
) -> CtNumberLine:
    degrees = len(rods.hu) - 3
    surplus = surplus_of(fit.least, degrees)
    fit = fit.widened(surplus)
    low, high = energy_interval(fit, surplus)
    residual = rods.hu - fit.at(fit.mu)
    order = np.argsort(fit.mu, kind="stable")
    mu, sigma = fit.mu[order], fit.sigma[order]
    worst = int(np.argmax(np.abs(residual)))
    along = np.linspace(min(0.0, mu[0]), mu[-1], _LINE_POINTS)
    rows = np.stack([np.ones_like(along), along], axis=1)
    band = np.sqrt(np.einsum("ij,jk,ik->i", rows, fit.at_energy, rows))
    axis = ("μ", "cm⁻¹")
    named = (*axis, "CT number", "HU")
    points = Curve(mu, rods.hu[order], sigma, *named, joined=False)
    scale_energy = None
    if scale is not None:
        wider = surplus_of(scale.least, len(rods.hu) - 1)
        scale_energy = Quantity(scale.energy, "keV", scale.u_energy * wider)
    return CtNumberLine(
        effective_energy=Quantity(fit.energy, "keV", fit.u_energy),
        energy_low=None if low is None else Quantity(low, "keV", 0.0),
        energy_high=None if high is None else Quantity(high, "keV", 0.0),
        scale_energy=scale_energy,
        **_line_numbers(rods, fit),
        largest_residual=Quantity(abs(float(residual[worst])), "HU", float(fit.sigma[worst])),
        reduced_chi_squared=Quantity(fit.least / degrees, "", math.sqrt(2.0 / degrees)),
        line=Curve(along, fit.at(along), band, *named, data=points),
        residuals=Curve(mu, residual[order], sigma, *axis, "Residual", "HU", joined=False),
        energy_curve=Curve(
            ENERGIES_KEV, np.sqrt(fit.chi2 / degrees), None, "Energy", "keV", "Misfit", ""
        ),
        **_correlation(rods),
        rods=readings,
        cautions=cautions,
    )


def _line_numbers(rods: Rods, fit: LineFit) -> dict[str, Any]:
    """Return slope and intercept and what follows from them, each with its uncertainty."""
    intercept, slope = (float(value) for value in fit.parameters)
    water = rods.water_mu(fit.energy)
    steep = (rods.water_mu(fit.energy + 0.25) - rods.water_mu(fit.energy - 0.25)) / 0.5

    def doubt(*row: float) -> float:
        vector = np.array(row)
        return math.sqrt(float(vector @ fit.covariance @ vector))

    zero = -intercept / slope
    return {
        "slope": Quantity(slope, "HU cm", doubt(0, 1, 0)),
        "intercept": Quantity(intercept, "HU", doubt(1, 0, 0)),
        "contrast_scale": Quantity(1.0 / slope, "cm⁻¹/HU", doubt(0, 1.0 / slope**2, 0)),
        "scale_factor": Quantity(
            slope * water / 1000.0, "", doubt(0, water / 1000.0, slope * steep / 1000.0)
        ),
        "water_equivalent_factor": Quantity(
            zero / water,
            "",
            doubt(-1.0 / (slope * water), -zero / (slope * water), -zero * steep / water**2),
        ),
        "water_offset": Quantity(intercept + slope * water, "HU", doubt(1.0, water, slope * steep)),
    }


def _correlation(rods: Rods) -> dict[str, Any]:
    """Return the energy of best correlation, r there, and r over energy."""
    found = best_correlation(rods)
    if found is None:
        return dict.fromkeys(("correlation_energy", "correlation", "correlation_curve"))
    energy, r, curve = found
    mu = rods.mu(energy)
    design = np.stack([np.ones_like(mu), mu], axis=1)
    line, *_ = np.linalg.lstsq(design, rods.hu, rcond=None)
    residual, sigma = rods.hu - design @ line, rods.sigma(mu, float(line[1]))
    total = float(np.sum((rods.hu - rods.hu.mean()) ** 2))
    doubt = math.sqrt(float(np.sum((residual * sigma) ** 2 + sigma**4 / 2))) / total
    three = np.column_stack([design, line[1] * rods.steepness(energy)])
    u_energy = float(np.linalg.norm(np.linalg.pinv(three)[2] * sigma))
    return {
        "correlation_energy": Quantity(energy, "keV", u_energy),
        "correlation": Quantity(r, "", doubt),
        "correlation_curve": Curve(ENERGIES_KEV, curve, None, "Energy", "keV", "r", ""),
    }
