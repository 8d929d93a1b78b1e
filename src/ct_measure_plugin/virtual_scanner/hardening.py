"""From measured line integrals to those of one energy: the scanner's beam-hardening step."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Literal

import numpy as np
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq

from ct_measure_plugin.physics.attenuation import ct_number
from ct_measure_plugin.virtual_scanner.phantom import AIR, WATER

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    from ct_measure_plugin.virtual_scanner.phantom import AnyMaterial
    from ct_measure_plugin.virtual_scanner.spectrum import Spectrum

    FloatArray = NDArray[np.float64]

__all__ = ["Correction", "WaterCalibration"]

Correction = Literal["water", "none"]

#: Water paths the correction table spans, mm; negative ones serve noisy readings near air.
TABLE_MM = (-30.0, 700.0)


@dataclass(frozen=True)
class WaterCalibration:
    """How a scanner calibrates its CT numbers on water.

    Parameters
    ----------
    spectrum : Spectrum
        Shares of the signal by energy.
    path_mm : float
        Water path at which the scale is set.
    correction : {"water", "none"}
        "water": readings are turned into the water path that gives them, so that water reads 0
        at any size. "none": one factor, right at `path_mm` only; other paths make a cup.
    water : Material or TabulatedMaterial
        What the calibration takes for water.

    Notes
    -----
    The effective energy is the one at which μ of water equals its mean over the beam hardened by
    `path_mm` of water, Σ s e^{−μL} μ / Σ s e^{−μL}.
    """

    spectrum: Spectrum
    path_mm: float = 200.0
    correction: Correction = "water"
    water: AnyMaterial = WATER

    @cached_property
    def _energies(self) -> FloatArray:
        return np.asarray(self.spectrum.energies_kev)

    @cached_property
    def _shares(self) -> FloatArray:
        return np.asarray(self.spectrum.shares)

    @cached_property
    def _water_over_air(self) -> FloatArray:
        return np.asarray(self.water.mu(self._energies) - AIR.mu(self._energies))

    def reading(self, path_mm: ArrayLike) -> FloatArray:
        """Return the line integral the detector reads behind a water path."""
        path = np.asarray(path_mm, dtype=float)
        exponent = -0.1 * np.multiply.outer(path, self._water_over_air)
        largest = exponent.max(axis=-1)
        total = np.sum(self._shares * np.exp(exponent - largest[..., None]), axis=-1)
        return np.asarray(-np.log(total) - largest)

    def mean_mu(self, material: AnyMaterial, path_mm: float) -> float:
        """Return μ of a material averaged over the beam behind a water path, cm⁻¹."""
        weights = self._shares * np.exp(-0.1 * path_mm * self._water_over_air)
        return float(np.sum(weights * material.mu(self._energies)) / np.sum(weights))

    @cached_property
    def mu_water(self) -> float:
        """The scale's μ of water, cm⁻¹."""
        return self.mean_mu(self.water, self.path_mm)

    @cached_property
    def mu_air(self) -> float:
        """The scale's μ of air, cm⁻¹."""
        return self.mean_mu(AIR, self.path_mm)

    @cached_property
    def effective_kev(self) -> float:
        """The effective energy."""
        if self.spectrum.is_mono:
            return self.spectrum.energies_kev[0]
        low, high = min(self.spectrum.energies_kev), max(self.spectrum.energies_kev)
        return float(brentq(lambda e: float(self.water.mu(e)) - self.mu_water, low, high))

    @cached_property
    def _path_of(self) -> CubicSpline:
        paths = np.arange(TABLE_MM[0], TABLE_MM[1] + 0.5, 1.0)
        return CubicSpline(self.reading(paths), paths)

    def correct(self, reading: FloatArray) -> FloatArray:
        """Return the line integrals of μ − μ_air at the effective energy."""
        if self.spectrum.is_mono:
            return reading
        per_mm = 0.1 * (self.mu_water - self.mu_air)
        if self.correction == "water":
            return np.asarray(per_mm * self._path_of(reading))
        factor = per_mm * self.path_mm / float(self.reading(self.path_mm))
        return factor * reading

    def to_hu(self, mu_per_mm: NDArray[np.floating]) -> FloatArray:
        """Return CT numbers from reconstructed μ − μ_air in mm⁻¹."""
        mu = 10.0 * np.asarray(mu_per_mm, dtype=float) + self.mu_air
        return ct_number(mu, self.mu_water)

    def thin_insert_hu(self, material: AnyMaterial, path_mm: float) -> float:
        """Return the CT number of a thin piece of a material in the middle of a water path.

        To first order a piece dl changes the reading by ⟨μ_m − μ_w⟩ dl; the correction divides
        by its slope ⟨μ_w⟩ (less air). Without correction the scale's one factor divides.
        """
        step = self.mean_mu(material, path_mm) - self.mean_mu(self.water, path_mm)
        if self.correction == "water" or self.spectrum.is_mono:
            slope = self.mean_mu(self.water, path_mm) - self.mean_mu(AIR, path_mm)
        else:
            slope = 10.0 * float(self.reading(self.path_mm)) / self.path_mm
        return 1000.0 * (step / slope) * (self.mu_water - self.mu_air) / self.mu_water
