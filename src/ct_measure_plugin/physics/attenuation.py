"""X-ray attenuation of materials by formula and density, and the CT number that follows from it.

The table is xraydb's Elam table (W. T. Elam, B. D. Ravel, J. R. Sieber, Radiat. Phys. Chem. 63,
2002, 121-128), total cross-section with coherent scattering. For water it agrees with the NIST
values of Hubbell and Seltzer (NIST SRD 126) to 0.03 %. It is the only table used here: xraydb's
second table differs by 1-3 %, and the two are never mixed.

This is the one file of the room that imports xraydb, and only when a function is called.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import lru_cache
from types import MappingProxyType
from typing import TYPE_CHECKING, Literal, TypeAlias

import numpy as np

from ct_measure_plugin.errors import ArgumentError, UnknownNameError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    FloatArray = NDArray[np.float64]

__all__ = [
    "MATERIALS",
    "Composition",
    "Material",
    "ct_number",
    "expected_hu",
    "linear_attenuation",
    "mass_attenuation",
    "material",
    "water_attenuation",
]

#: A chemical formula, or element symbol -> weight fraction.
Composition: TypeAlias = str | Mapping[str, float]

#: Which interactions are counted.
Kind: TypeAlias = Literal["total", "photo", "incoh", "coh"]

#: Energies for which the table is asked, keV. The table reaches further; CT does not.
ENERGY_RANGE_KEV = (1.0, 500.0)


def _energies(energy_kev: ArrayLike) -> FloatArray:
    energies = np.asarray(energy_kev, dtype=float)
    low, high = ENERGY_RANGE_KEV
    if not (np.all(energies >= low) and np.all(energies <= high)):
        raise ArgumentError("energy_kev", f"must lie within {low:g} to {high:g} keV", energy_kev)
    return energies


@lru_cache(maxsize=512)
def _formula_fractions(formula: str) -> tuple[tuple[str, float], ...]:
    import xraydb

    try:
        counts = xraydb.chemparse(formula)
    except ValueError as error:
        raise ArgumentError("composition", "must be a chemical formula", formula) from error
    if not counts:
        raise ArgumentError("composition", "must be a chemical formula", formula)
    masses = {symbol: n * xraydb.atomic_mass(symbol) for symbol, n in counts.items()}
    total = sum(masses.values())
    return tuple((symbol, mass / total) for symbol, mass in masses.items())


def _fractions(composition: Composition) -> tuple[tuple[str, float], ...]:
    if isinstance(composition, str):
        return _formula_fractions(composition)
    parts = tuple(composition.items())
    total = math.fsum(share for _, share in parts)
    if not parts or any(not share >= 0 for _, share in parts) or abs(total - 1) > 0.01:
        raise ArgumentError(
            "composition", "must hold weight fractions that sum to 1 within 0.01", dict(parts)
        )
    return tuple((symbol, share / total) for symbol, share in parts)


@lru_cache(maxsize=512)
def _element(symbol: str, energies_kev: tuple[float, ...], kind: Kind) -> FloatArray:
    import xraydb

    try:
        values = xraydb.mu_elam(symbol, 1000.0 * np.asarray(energies_kev), kind=kind)
    except (ValueError, KeyError) as error:
        raise ArgumentError("composition", "must name chemical elements", symbol) from error
    found = np.asarray(values, dtype=float)
    found.setflags(write=False)
    return found


def mass_attenuation(
    composition: Composition, energy_kev: ArrayLike, *, kind: Kind = "total"
) -> FloatArray:
    """Return the mass attenuation coefficient μ/ρ.

    Parameters
    ----------
    composition : str or mapping
        A chemical formula ("C5H8O2"), or weight fractions by element symbol.
    energy_kev : array_like
        Photon energies.
    kind : {"total", "photo", "incoh", "coh"}
        All interactions, or one of them: photoelectric, incoherent or coherent scattering.

    Returns
    -------
    ndarray, shape of `energy_kev`
        cm²/g; the total includes coherent scattering.

    Raises
    ------
    ArgumentError
        If the composition cannot be understood or an energy lies outside 1 to 500 keV.

    References
    ----------
    W. T. Elam, B. D. Ravel, J. R. Sieber, Radiat. Phys. Chem. 63 (2002) 121; mixture rule as in
    J. H. Hubbell and S. M. Seltzer, NIST SRD 126.

    Examples
    --------
    >>> mass_attenuation("H2O", [30.0, 60.0]).round(4).tolist()
    [0.3756, 0.2059]
    """
    energies = _energies(energy_kev)
    flat = tuple(np.ravel(energies).tolist())
    total = np.zeros(len(flat))
    for symbol, share in _fractions(composition):
        total += share * _element(symbol, flat, kind)
    return total.reshape(energies.shape)


def linear_attenuation(
    composition: Composition, energy_kev: ArrayLike, *, density_g_cm3: float
) -> FloatArray:
    """Return the linear attenuation coefficient μ in cm⁻¹.

    Parameters
    ----------
    composition : str or mapping
        A chemical formula, or weight fractions by element symbol.
    energy_kev : array_like
        Photon energies.
    density_g_cm3 : float
        Density, greater than 0.

    Returns
    -------
    ndarray, shape of `energy_kev`
        cm⁻¹.

    Examples
    --------
    >>> float(linear_attenuation("C5H8O2", 70.0, density_g_cm3=1.19).round(4))
    0.2172
    """
    if not 0 < density_g_cm3 < math.inf:
        raise ArgumentError("density_g_cm3", "must be greater than 0", density_g_cm3)
    return density_g_cm3 * mass_attenuation(composition, energy_kev)


def water_attenuation(energy_kev: ArrayLike) -> FloatArray:
    """Return μ of water of density 1 g/cm³ in cm⁻¹, the reference of the CT-number scale.

    >>> float(water_attenuation(70.0).round(5))
    0.19285
    """
    return linear_attenuation("H2O", energy_kev, density_g_cm3=1.0)


def ct_number(mu: ArrayLike, mu_water: ArrayLike) -> FloatArray:
    """Return the CT number 1000 (μ − μ_w) / μ_w in HU: water 0, vacuum −1000.

    Notes
    -----
    A second definition in use divides by (μ_w − μ_air), which makes *air* exactly −1000; the two
    scales differ by 0.11 % of the HU value plus 1.1 HU. The first is used throughout.

    >>> ct_number([0.0, 0.2, 0.3], 0.2).round(6).tolist()
    [-1000.0, 0.0, 500.0]
    """
    reference = np.asarray(mu_water, dtype=float)
    number: FloatArray = 1000.0 * (np.asarray(mu, dtype=float) - reference) / reference
    return number


def expected_hu(
    composition: Composition, energy_kev: ArrayLike, *, density_g_cm3: float
) -> FloatArray:
    """Return the CT number a material should read at an energy, in HU.

    >>> float(expected_hu("C2F4", 70.0, density_g_cm3=2.16).round(1))
    939.6
    """
    mu = linear_attenuation(composition, energy_kev, density_g_cm3=density_g_cm3)
    return ct_number(mu, water_attenuation(energy_kev))


@dataclass(frozen=True, slots=True)
class Material:
    """A substance: what it is made of and how dense it is.

    Parameters
    ----------
    name : str
        What people call it.
    composition : str or tuple of (str, float)
        A chemical formula, or pairs of element symbol and weight fraction.
    density_g_cm3 : float
        Density, greater than 0.
    note : str
        Where composition and density come from, or what limits them.
    density_uncertainty_g_cm3 : float
        Standard uncertainty of the density, not negative.

    Examples
    --------
    >>> acrylic = Material("PMMA", "C5H8O2", 1.19)
    >>> float(acrylic.hu(70.0).round(1))
    126.1
    """

    name: str
    composition: str | tuple[tuple[str, float], ...]
    density_g_cm3: float
    note: str = field(default="", repr=False)
    density_uncertainty_g_cm3: float = field(default=0.0, repr=False)

    def __post_init__(self) -> None:
        if not 0 < self.density_g_cm3 < math.inf:
            raise ArgumentError("density_g_cm3", "must be greater than 0", self.density_g_cm3)
        if not 0 <= self.density_uncertainty_g_cm3 < math.inf:
            raise ArgumentError(
                "density_uncertainty_g_cm3", "must not be negative", self.density_uncertainty_g_cm3
            )

    @property
    def elements(self) -> frozenset[str]:
        """Symbols of the elements it is made of."""
        parts = self.composition if isinstance(self.composition, str) else dict(self.composition)
        return frozenset(symbol for symbol, _ in _fractions(parts))

    def mu(self, energy_kev: ArrayLike) -> FloatArray:
        """Return μ in cm⁻¹ at energies in keV."""
        parts = self.composition if isinstance(self.composition, str) else dict(self.composition)
        return linear_attenuation(parts, energy_kev, density_g_cm3=self.density_g_cm3)

    def hu(self, energy_kev: ArrayLike) -> FloatArray:
        """Return the expected CT number in HU at energies in keV."""
        return ct_number(self.mu(energy_kev), water_attenuation(energy_kev))


_LIBRARY = "generic density, NIST/Geant4 material list"
_TYPICAL = "density typical of inserts, from memory; enter the maker's value"
_BONE = (
    ("H", 0.034),
    ("C", 0.155),
    ("N", 0.042),
    ("O", 0.435),
    ("Na", 0.001),
    ("Mg", 0.002),
    ("P", 0.103),
    ("S", 0.003),
    ("Ca", 0.225),
)
_AIR = (("C", 0.000124), ("N", 0.755268), ("O", 0.231781), ("Ar", 0.012827))

#: The densities' standard uncertainties are this project's choice for a piece whose maker's value
#: is not known: 1 % or less for plastics, more where fillers or pressing change the density.
_KNOWN = (
    Material("air", _AIR, 0.001205, "dry, near sea level; NIST/Geant4 material list", 0.00004),
    Material("water", "H2O", 1.0, "the reference; 0.9982 g/cm³ at 20 °C reads -1.8 HU", 0.001),
    Material("polymethylpentene", "C6H12", 0.83, _TYPICAL, 0.01),
    Material("polypropylene", "C3H6", 0.90, _LIBRARY, 0.01),
    Material("LDPE", "C2H4", 0.92, _TYPICAL, 0.01),
    Material("polystyrene", "C8H8", 1.06, _LIBRARY, 0.01),
    Material("nylon-6", "C6H11NO", 1.14, _LIBRARY, 0.01),
    Material("polycarbonate", "C16H14O3", 1.20, _LIBRARY, 0.01),
    Material("PMMA", "C5H8O2", 1.19, _LIBRARY, 0.01),
    Material("PET", "C10H8O4", 1.38, _TYPICAL, 0.01),
    Material("POM", "CH2O", 1.42, _TYPICAL, 0.01),
    Material("PTFE", "C2F4", 2.16, _TYPICAL, 0.02),
    Material("rigid PVC", "C2H3Cl", 1.38, _TYPICAL + "; fillers change it", 0.03),
    Material("aluminium", "Al", 2.699, _LIBRARY, 0.01),
    Material("copper", "Cu", 8.96, _LIBRARY, 0.03),
    Material("cortical bone", _BONE, 1.92, "ICRU 44 composition, from memory", 0.03),
)

#: Materials by name. Densities are defaults: they dominate the error of an expected CT number
#: (about 9.5 HU per 0.01 g/cm³), so enter the value for the piece at hand.
MATERIALS: Mapping[str, Material] = MappingProxyType({found.name: found for found in _KNOWN})


def material(name: str) -> Material:
    """Return a material of the library by its name.

    Raises
    ------
    UnknownNameError
        If there is none of that name; the message lists those there are.

    >>> material("PTFE").density_g_cm3
    2.16
    """
    try:
        return MATERIALS[name]
    except KeyError:
        raise UnknownNameError("material", name, tuple(MATERIALS)) from None
