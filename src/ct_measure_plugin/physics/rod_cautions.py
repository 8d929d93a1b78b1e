"""What is to be said of a line of rods: an outlier, a misfit, a scale that is off."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from scipy import stats

from ct_measure_plugin.physics.results import Caution, Quantity

if TYPE_CHECKING:
    from ct_measure_plugin.physics.rod_fit import LineFit, ScaleFit
    from ct_measure_plugin.physics.rod_readings import Readings, RodReading
    from ct_measure_plugin.physics.rod_table import Rods

__all__ = ["cautions_of", "surplus_of"]

#: Leverage beyond which one rod decides the line nearly alone.
DECIDING_LEVERAGE = 0.7

#: Probability of chi-squared below which a model is said not to describe the rods.
MISFIT_PROBABILITY = 0.01


def surplus_of(least: float, degrees: int) -> float:
    """Return by what uncertainties must grow: 1 unless chi-squared is too large for chance."""
    if degrees < 1 or stats.chi2.sf(least, degrees) >= MISFIT_PROBABILITY:
        return 1.0
    return math.sqrt(least / degrees)


def cautions_of(
    rods: Rods, fit: LineFit, scale: ScaleFit | None, readings: Readings
) -> tuple[Caution, ...]:
    """Return the cautions of a line, its uncertainties not yet multiplied."""
    found = [
        _outlier(number, rod, readings.without)
        for number, rod in enumerate(readings.rods, 1)
        if rod.reads_as
    ]
    degrees = len(rods.hu) - 3
    others_agree = readings.without is not None and (
        surplus_of(readings.without.least, degrees - 1) == 1
    )
    if surplus_of(fit.least, degrees) > 1 and not others_agree:
        found.append(_misfit(fit, degrees))
    if scale is None or surplus_of(scale.least - fit.least, 2) > 1:
        found.append(
            Caution(
                "scale-off",
                "The rods do not lie on the line that defines the HU scale"
                + (
                    "."
                    if scale is None
                    else f": chi-squared is larger by {scale.least - fit.least:.0f} with slope and"
                    " intercept held than with both free."
                ),
                "See the scale factor and the CT number of water on the line; calibrate the"
                " scanner on water, and check densities.",
            )
        )
    k = int(np.argmax(fit.leverage))
    if fit.leverage[k] > DECIDING_LEVERAGE:
        found.append(
            Caution(
                "one-rod-decides",
                f"The {readings.rods[k].name} rod decides the line nearly alone (leverage"
                f" {fit.leverage[k]:.2f}).",
                "Judge by the residuals, not by a correlation coefficient.",
            )
        )
    return tuple(found)


def _misfit(fit: LineFit, degrees: int) -> Caution:
    return Caution(
        "one-energy-fails",
        f"No single energy describes the rods: chi-squared {fit.least:.0f} for {degrees} degree"
        f"{'s' * (degrees != 1)} of freedom. All uncertainties were multiplied by"
        f" {surplus_of(fit.least, degrees):.1f}.",
        "Leave out materials of high atomic number, or check densities: a beam of many energies"
        " hardens on its way through dense rods.",
    )


def _outlier(number: int, rod: RodReading, without: LineFit | None) -> Caution:
    energy = ""
    if without is not None:
        energy = " Without it the energy is " + str(
            Quantity(without.energy, "keV", without.u_energy)
        )
    return Caution(
        "rod-reads-as-another",
        f"Rod {number} reads as {rod.reads_as}, entered as {rod.material}"
        f" ({rod.sigma:+.0f} standard uncertainties from the others' line; as {rod.material} its"
        f" density would be {rod.density_read.value:.3f} g/cm³).{energy}" + "." * bool(energy),
        "Check which rod it is, and its density.",
    )
