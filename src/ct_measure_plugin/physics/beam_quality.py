"""Which energy a beam should behave as, from its tube voltage and half-value layer or filtration.

The continuum of a tube follows Kramers' law behind aluminium. Behind the water of a phantom it
gives every rod a mean μ, and so a CT number; the line through these expected CT numbers has an
effective energy like the line through measured ones, and the two can be compared.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import TYPE_CHECKING, Literal, TypeAlias

import numpy as np
from scipy.optimize import brentq

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.attenuation import MATERIALS, Material
from ct_measure_plugin.physics.kerma import air_kerma_weight
from ct_measure_plugin.physics.results import NotMeasured, Quantity
from ct_measure_plugin.physics.rod_fit import best_line
from ct_measure_plugin.physics.rod_table import Rods

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from numpy.typing import NDArray

    FloatArray = NDArray[np.float64]

__all__ = ["BeamQuality", "Detector", "beam_quality", "half_value_layer", "tube_photons"]

Detector: TypeAlias = Literal["energy integrating", "photon counting"]

#: Energy bins of a continuum, keV.
_STEP_KEV = 1.0
_LOWEST_KEV = 8.0

#: Filtrations between which one is looked for, mm of aluminium.
_FILTERS_MM = (0.2, 60.0)

#: Relative standard uncertainties where none is given: of a half-value layer measured with care, of
#: a stated filtration, of a stated tube voltage (this project's choice).
_U_HVL, _U_FILTER, _U_KVP = 0.02, 0.15, 0.01

#: Copper that stands for another filter of the same half-value layer, mm: how much the continuum's
#: shape matters.
_OTHER_COPPER_MM = 0.1


@dataclass(frozen=True, slots=True)
class BeamQuality:
    """What a beam should behave as.

    Attributes
    ----------
    energy : Quantity
        Effective energy of the line through the expected CT numbers of the rods, keV.
    water_energy : Quantity
        Energy at which μ of water equals its mean over the hardened beam, keV: the one for μ. It
        is higher than the other, by 1 to 7 keV for 80 to 140 kV.
    half_value_layer : Quantity
        mm of aluminium, in air, before the phantom.
    filtration : Quantity
        mm of aluminium that give it under Kramers' law.
    """

    energy: Quantity
    water_energy: Quantity
    half_value_layer: Quantity
    filtration: Quantity


def tube_photons(
    kvp: float, aluminium_mm: float, copper_mm: float = 0.0
) -> tuple[FloatArray, FloatArray]:
    """Return photon energies in keV and their relative numbers, by Kramers' law.

    Notes
    -----
    (E₀ − E)/E photons an energy interval (H. A. Kramers, Phil. Mag. 46, 1923, 836; from memory),
    times exp(−Σ μ d). Characteristic lines are left out.

    Examples
    --------
    >>> energies, photons = tube_photons(120.0, 6.0)
    >>> bool(30 < energies[np.argmax(photons)] < 50)
    True
    """
    energies = np.arange(_LOWEST_KEV + _STEP_KEV / 2, kvp, _STEP_KEV)
    photons = (kvp - energies) / energies
    for name, thickness in (("aluminium", aluminium_mm), ("copper", copper_mm)):
        photons = photons * np.exp(-_mu(name, kvp) * thickness / 10.0)
    return energies, photons


@lru_cache(maxsize=64)
def _mu(name: str, kvp: float) -> FloatArray:
    energies = np.arange(_LOWEST_KEV + _STEP_KEV / 2, kvp, _STEP_KEV)
    found = MATERIALS[name].mu(energies)
    found.setflags(write=False)
    return found


def half_value_layer(energies_kev: FloatArray, photons: FloatArray) -> float:
    """Return the aluminium that halves a beam's air kerma, mm.

    Examples
    --------
    >>> one = half_value_layer(np.array([60.0]), np.array([1.0]))
    >>> bool(abs(one - 10 * math.log(2) / 0.74997) < 0.01)  # ln 2 / μ of aluminium at 60 keV
    True
    """
    kerma = photons * air_kerma_weight(energies_kev)
    mu = MATERIALS["aluminium"].mu(energies_kev) / 10.0
    total = float(kerma.sum())

    def left(thickness: float) -> float:
        return float(np.sum(kerma * np.exp(-mu * thickness))) / total - 0.5

    return float(brentq(left, 0.0, 200.0, xtol=1e-6))


@dataclass(frozen=True, slots=True)
class _Asked:
    """A beam and what it is for."""

    kvp: float
    hvl_mm: float | None
    filtration_mm: float | None
    path_mm: float
    materials: tuple[Material, ...]
    detector: Detector
    copper_mm: float = 0.0

    def filter_mm(self) -> float | None:
        """Return the aluminium of the beam, None where no filter gives the half-value layer."""
        if self.hvl_mm is None:
            return self.filtration_mm
        wanted = self.hvl_mm

        def off(aluminium: float) -> float:
            return half_value_layer(*tube_photons(self.kvp, aluminium, self.copper_mm)) - wanted

        if off(_FILTERS_MM[0]) > 0 or off(_FILTERS_MM[1]) < 0:
            return None
        return float(brentq(off, *_FILTERS_MM, xtol=1e-4))


@lru_cache(maxsize=256)
def _energies_of(asked: _Asked) -> tuple[float, float, float] | None:
    """Return line energy, water energy and filtration; None where the beam cannot be."""
    aluminium = asked.filter_mm()
    if aluminium is None:
        return None
    energies, photons = tube_photons(asked.kvp, aluminium, asked.copper_mm)
    water = MATERIALS["water"].mu(energies)
    signal = photons * np.exp(-water * asked.path_mm / 10.0)
    if asked.detector == "energy integrating":
        signal = signal * energies
    signal = signal / signal.sum()
    mean_water = float(signal @ water)
    hu = [1000.0 * (float(signal @ m.mu(energies)) / mean_water - 1.0) for m in asked.materials]
    fit = best_line(Rods.checked(hu, asked.materials, 1.0, 0.0))
    if fit is None:
        return None
    water_energy = brentq(lambda e: float(MATERIALS["water"].mu(e)) - mean_water, 15.0, asked.kvp)
    return fit.energy, float(water_energy), aluminium


def beam_quality(
    kvp: float,
    materials: Sequence[Material],
    *,
    path_mm: Quantity,
    hvl_mm: float | None = None,
    filtration_mm: float | None = None,
    detector: Detector = "energy integrating",
) -> BeamQuality | NotMeasured:
    """Return the effective energy that rods in a phantom should have in a beam.

    Parameters
    ----------
    kvp : float
        Tube voltage, 40 to 160 kV.
    materials : sequence of Material
        The rods', at least four different ones that fix a line.
    path_mm : Quantity
        Water-equivalent path through the phantom, mm, with its uncertainty.
    hvl_mm, filtration_mm : float, optional
        Half-value layer in aluminium, or total filtration in aluminium, mm. One is needed; the
        half-value layer is better.
    detector : {"energy integrating", "photon counting"}
        How the detector weighs photons; it is taken to absorb all.

    Returns
    -------
    BeamQuality or NotMeasured
        NotMeasured where no filter gives the half-value layer, or the rods fix no energy.

    Raises
    ------
    ArgumentError
        If a value is out of range, or neither or both of the two are given.

    Notes
    -----
    Uncertainties are those of tube voltage (1 %), half-value layer (2 %) or filtration (15 %), and
    path, by finite differences, and for the continuum's shape the difference that 0.1 mm of copper
    in place of aluminium would make, over √3.

    Examples
    --------
    >>> names = ("air", "LDPE", "polystyrene", "PMMA", "POM", "PTFE")
    >>> found = beam_quality(120.0, [MATERIALS[name] for name in names], hvl_mm=7.0,
    ...                      path_mm=Quantity(170.0, "mm", 20.0))
    >>> bool(60 < found.energy.value < found.water_energy.value < 75)
    True
    """
    if not 40.0 <= kvp <= 160.0:
        raise ArgumentError("kvp", "must lie within 40 to 160 kV", kvp)
    if (hvl_mm is None) == (filtration_mm is None):
        raise ArgumentError("hvl_mm", "must be given, or else filtration_mm", hvl_mm)
    for name, value in (("hvl_mm", hvl_mm), ("filtration_mm", filtration_mm)):
        if value is not None and not 0 < value < 60:
            raise ArgumentError(name, "must lie between 0 and 60 mm", value)
    if not path_mm.value >= 0:
        raise ArgumentError("path_mm", "must not be negative", path_mm.value)
    asked = _Asked(round(kvp, 1), hvl_mm, filtration_mm, path_mm.value, tuple(materials), detector)
    found = _energies_of(asked)
    if found is None:
        if asked.filter_mm() is None:
            return NotMeasured(
                f"no aluminium filter gives a beam of {kvp:g} kV a half-value layer of"
                f" {hvl_mm:g} mm",
                "check tube voltage and half-value layer",
            )
        return NotMeasured("these materials do not fix an effective energy", "add rods")
    return _with_doubts(asked, found, path_mm.uncertainty or 0.0)


def _with_doubts(asked: _Asked, found: tuple[float, float, float], u_path: float) -> BeamQuality:
    def differing(change: Callable[[float], _Asked], step: float) -> FloatArray:
        """Return half the difference that a step either way makes."""
        ends = [_energies_of(change(sign * step)) for sign in (-1.0, 1.0)]
        low, high = (found if end is None else end for end in ends)
        half: FloatArray = 0.5 * (np.array(high) - np.array(low))
        return half

    parts = [
        differing(lambda d: replace(asked, kvp=asked.kvp + d), round(_U_KVP * asked.kvp, 1)),
        differing(lambda d: replace(asked, path_mm=max(asked.path_mm + d, 0.0)), u_path),
    ]
    if asked.hvl_mm is not None:
        hvl = asked.hvl_mm
        u_hvl = _U_HVL * hvl
        parts.append(differing(lambda d: replace(asked, hvl_mm=hvl + d), u_hvl))
        other = _energies_of(replace(asked, copper_mm=_OTHER_COPPER_MM))
        if other is not None:
            parts.append((np.array(other) - np.array(found)) / math.sqrt(3) * [1, 1, 0])
        shown = Quantity(hvl, "mm", u_hvl)
    else:
        filtration = asked.filtration_mm or 0.0
        u_filter = _U_FILTER * filtration
        parts.append(differing(lambda d: replace(asked, filtration_mm=filtration + d), u_filter))
        value = half_value_layer(*tube_photons(asked.kvp, filtration))
        more = half_value_layer(*tube_photons(asked.kvp, filtration + u_filter))
        shown = Quantity(value, "mm", abs(more - value))
    doubt = np.sqrt(np.sum(np.square(parts), axis=0))
    return BeamQuality(
        energy=Quantity(found[0], "keV", float(doubt[0])),
        water_energy=Quantity(found[1], "keV", float(doubt[1])),
        half_value_layer=shown,
        filtration=Quantity(found[2], "mm", float(doubt[2])),
    )
