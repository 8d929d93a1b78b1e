"""From HU to attenuation and back, and from one scanner's HU to another's.

μ = μ_w(E) (1 + HU/1000) holds where E is the energy that the scanner behaves as. A material's HU at
another energy needs its composition as well.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any, TypeAlias

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.attenuation import MATERIALS, Material, ct_number
from ct_measure_plugin.physics.results import Caution, Quantity, Result

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import ArrayLike, NDArray

    from ct_measure_plugin.physics.volume import Volume

    FloatArray = NDArray[np.float64]

__all__ = [
    "HuTransfer",
    "hu_at_energy",
    "hu_from_mu",
    "hu_quantity",
    "mu_from_hu",
    "mu_quantity",
    "mu_volume",
]

#: An energy in keV, alone or with its standard uncertainty.
Energy: TypeAlias = "float | Quantity"

#: Half the step of derivatives with energy, keV.
_HALF = 0.05


def _energy(name: str, given: Energy) -> tuple[float, float]:
    if isinstance(given, Quantity):
        if given.unit != "keV":
            raise ArgumentError(name, "must be in keV", given.unit)
        return given.value, given.uncertainty or 0.0
    return float(given), 0.0


def _log_slope(function: Callable[[float], float], energy: float) -> float:
    """Return the derivative of a function's logarithm with energy."""
    return (math.log(function(energy + _HALF)) - math.log(function(energy - _HALF))) / (2 * _HALF)


def _water(water: Material | None) -> Material:
    return MATERIALS["water"] if water is None else water


def mu_from_hu(hu: ArrayLike, energy_kev: float, *, water: Material | None = None) -> FloatArray:
    """Return μ in cm⁻¹ of CT numbers at an energy.

    Parameters
    ----------
    hu : array_like
        CT numbers.
    energy_kev : float
        The scanner's effective energy.
    water : Material, optional
        What the scale takes for water; by default of density 1 g/cm³.

    Examples
    --------
    >>> mu_from_hu([-1000.0, 0.0, 126.1], 70.0).round(5).tolist()
    [0.0, 0.19285, 0.21717]
    """
    found: FloatArray = _water(water).mu(energy_kev) * (1.0 + np.asarray(hu, dtype=float) / 1000.0)
    return found


def hu_from_mu(mu: ArrayLike, energy_kev: float, *, water: Material | None = None) -> FloatArray:
    """Return CT numbers of μ in cm⁻¹ at an energy; the inverse of :func:`mu_from_hu`.

    >>> hu_from_mu([0.0, 0.21717], 70.0).round(1).tolist()
    [-1000.0, 126.1]
    """
    return ct_number(mu, _water(water).mu(energy_kev))


def mu_quantity(hu: Quantity | float, energy: Energy, *, water: Material | None = None) -> Quantity:
    """Return μ of one CT number with its uncertainty, cm⁻¹.

    The energy's part is common to all μ of a scan; the CT number's is not.

    >>> print(mu_quantity(Quantity(126.1, "HU", 2.0), Quantity(70.0, "keV", 1.0)))
    0.2172 ± 0.0013 cm⁻¹
    """
    at, u_energy = _energy("energy", energy)
    value, u_hu = (hu.value, hu.uncertainty or 0.0) if isinstance(hu, Quantity) else (hu, 0.0)
    one = _water(water)
    mu = float(mu_from_hu(value, at, water=one))
    u_water = abs(mu) * abs(_log_slope(lambda e: float(one.mu(e)), at)) * u_energy
    return Quantity(mu, "cm⁻¹", math.hypot(float(one.mu(at)) * u_hu / 1000.0, u_water))


def hu_quantity(mu: Quantity | float, energy: Energy, *, water: Material | None = None) -> Quantity:
    """Return the CT number of one μ in cm⁻¹ with its uncertainty, HU.

    >>> print(hu_quantity(Quantity(0.2172, "cm⁻¹", 0.0004), Quantity(70.0, "keV", 1.0)))
    126.3 ± 6.6 HU
    """
    at, u_energy = _energy("energy", energy)
    value, u_mu = (mu.value, mu.uncertainty or 0.0) if isinstance(mu, Quantity) else (mu, 0.0)
    one = _water(water)
    hu = float(hu_from_mu(value, at, water=one))
    u_water = abs(hu + 1000.0) * abs(_log_slope(lambda e: float(one.mu(e)), at)) * u_energy
    return Quantity(hu, "HU", math.hypot(1000.0 * u_mu / float(one.mu(at)), u_water))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class HuTransfer(Result):
    """One material at two energies.

    Attributes
    ----------
    here, there : Quantity
        CT number at the first and at the second energy, HU.
    difference : Quantity
        there − here, HU.
    """

    here: Quantity
    there: Quantity
    difference: Quantity


def hu_at_energy(
    material: Material,
    from_energy: Energy,
    to_energy: Energy,
    *,
    hu: Quantity | float | None = None,
) -> HuTransfer:
    """Return what a material reads at another effective energy.

    Parameters
    ----------
    material : Material
        What it is. Its density matters only if `hu` is not given.
    from_energy, to_energy : float or Quantity
        Effective energies of the two scanners, keV.
    hu : Quantity or float, optional
        What it reads at the first; by default what its density makes one expect.

    Returns
    -------
    HuTransfer

    Notes
    -----
    HU + 1000 is proportional to density, so that (HU₂ + 1000)/(HU₁ + 1000) = g(E₂)/g(E₁) with g the
    material's mass attenuation over water's, whatever the density. The energies' uncertainties are
    taken as independent.

    Examples
    --------
    >>> from ct_measure_plugin.physics.attenuation import material
    >>> moved = hu_at_energy(material("PTFE"), Quantity(70.0, "keV", 1.0), 60.0)
    >>> print(moved.here, "->", moved.there)
    940 ± 18 HU -> 972 ± 18 HU
    >>> print(moved.difference)
    32.6 ± 2.5 HU
    """
    (first, u_first), (second, u_second) = (
        _energy("from_energy", from_energy),
        _energy("to_energy", to_energy),
    )

    def ratio(energy: float) -> float:
        return float(material.mu(energy) / MATERIALS["water"].mu(energy))

    grows = ratio(second) / ratio(first)
    slope_first, slope_second = (_log_slope(ratio, e) for e in (first, second))
    if hu is None:
        value = float(material.hu(first))
        share = material.density_uncertainty_g_cm3 / material.density_g_cm3
        # of the density, the expectation at each energy has its share
        u_here = math.hypot((value + 1000) * share, (value + 1000) * slope_first * u_first)
        there = float(material.hu(second))
        u_there = math.hypot((there + 1000) * share, (there + 1000) * slope_second * u_second)
        u_step = math.hypot(
            (there - value) * share,
            (value + 1000) * slope_first * u_first,
            (there + 1000) * slope_second * u_second,
        )
    else:
        value, u_here = (hu.value, hu.uncertainty or 0.0) if isinstance(hu, Quantity) else (hu, 0.0)
        there = (value + 1000.0) * grows - 1000.0
        moved = math.hypot(
            (there + 1000) * slope_first * u_first, (there + 1000) * slope_second * u_second
        )
        u_there = math.hypot(grows * u_here, moved)
        u_step = math.hypot((grows - 1.0) * u_here, moved)
    return HuTransfer(
        here=Quantity(float(value), "HU", u_here),
        there=Quantity(there, "HU", u_there),
        difference=Quantity(there - float(value), "HU", u_step),
    )


def mu_volume(volume: Volume, energy: Energy, *, water: Material | None = None) -> Volume:
    """Return a volume of μ in cm⁻¹ from one of HU.

    Parameters
    ----------
    volume : Volume
        In HU; a lazy one stays lazy.
    energy : float or Quantity
        The scanner's effective energy, keV. Its uncertainty is told in a caution.
    water : Material, optional
        What the scale takes for water.

    Returns
    -------
    Volume
        float32, unit ``cm⁻¹``, on the same grid.

    Raises
    ------
    ArgumentError
        If the volume is not in HU.

    Examples
    --------
    >>> from ct_measure_plugin.physics.volume import Volume
    >>> water = Volume(np.zeros((1, 8, 8), np.int16), (1.0, 0.5, 0.5))
    >>> found = mu_volume(water, Quantity(70.0, "keV", 0.5))
    >>> found.unit, round(float(found.hu[0, 0, 0]), 5)
    ('cm⁻¹', 0.19285)
    """
    if not volume.is_hu:
        raise ArgumentError("volume", "must be in HU", volume.unit)
    at, u_energy = _energy("energy", energy)
    one = _water(water)
    scale = float(one.mu(at))

    def convert(values: Any) -> Any:
        return (values / 1000.0 + 1.0) * scale

    common = abs(_log_slope(lambda e: float(one.mu(e)), at)) * u_energy
    low_high = volume.representable_hu
    return replace(
        volume,
        hu=convert(volume.hu.astype(np.float32)).astype(np.float32),
        unit="cm⁻¹",
        padding_hu=None if volume.padding_hu is None else _ends(convert(volume.padding_hu)),
        representable_hu=None if low_high is None else (convert(low_high[0]), convert(low_high[1])),
        windows=(),
        source=replace(volume.source, content_digest=""),
        cautions=(
            *volume.cautions,
            Caution(
                "mu-scale",
                f"μ was converted from HU at {Quantity(at, 'keV', u_energy)};"
                f" all μ share a standard uncertainty of {100 * common:.2g} % from the energy.",
            ),
        ),
    )


def _ends(ranges: FloatArray) -> FloatArray:
    """Widen closed ranges by the rounding of float32, so that padding stays padding."""
    step = 1e-5 * np.maximum(np.abs(ranges), 1e-3)
    found: FloatArray = ranges + step * np.array([-1.0, 1.0])
    return found
