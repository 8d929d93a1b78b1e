"""Water at its temperature: density, and what that makes of its CT number."""

from __future__ import annotations

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.results import Quantity

__all__ = ["water_density", "water_hu"]

#: Water in a phantom is neither pure nor free of air: taken as one standard uncertainty, g/cm³.
PURITY_G_CM3 = 0.0001


def water_density(temperature_c: float, *, u_temperature_c: float = 0.5) -> Quantity:
    """Return the density of water at a temperature, g/cm³.

    Parameters
    ----------
    temperature_c : float
        0 to 40 °C.
    u_temperature_c : float
        Its standard uncertainty, K.

    Returns
    -------
    Quantity
        g/cm³; the uncertainty is that of the temperature, and 0.0001 g/cm³ for what is dissolved.

    Raises
    ------
    ArgumentError
        If the temperature lies outside the formula's range.

    References
    ----------
    M. Tanaka, G. Girard, R. Davis, A. Peuto, N. Bignell, Metrologia 38 (2001) 301: recommended
    table for the density of water between 0 °C and 40 °C, air-free, at 101 325 Pa (formula from
    memory, held against published values in the tests).

    Examples
    --------
    >>> print(water_density(20.0))
    0.99821 ± 0.00014 g/cm³
    """
    if not 0.0 <= temperature_c <= 40.0:
        raise ArgumentError("temperature_c", "must lie within 0 to 40 °C", temperature_c)
    if not u_temperature_c >= 0:
        raise ArgumentError("u_temperature_c", "must not be negative", u_temperature_c)
    slope = (_density(temperature_c + 0.1) - _density(temperature_c - 0.1)) / 0.2
    doubt = (slope**2 * u_temperature_c**2 + PURITY_G_CM3**2) ** 0.5
    return Quantity(_density(temperature_c), "g/cm³", doubt)


def _density(t: float) -> float:
    bend = (t - 3.983035) ** 2 * (t + 301.797) / (522528.9 * (t + 69.34881))
    return 0.99997495 * (1.0 - bend)


def water_hu(temperature_c: float, *, u_temperature_c: float = 0.5) -> Quantity:
    """Return what water of a temperature should read, where 1 g/cm³ reads 0 HU.

    To be subtracted from a water reading before it is judged, if the scanner's scale rests on water
    of density 1.

    Examples
    --------
    >>> print(water_hu(20.0), "|", water_hu(37.0))
    -1.79 ± 0.14 HU | -6.67 ± 0.21 HU
    """
    density = water_density(temperature_c, u_temperature_c=u_temperature_c)
    return Quantity(1000.0 * (density.value - 1.0), "HU", 1000.0 * (density.uncertainty or 0.0))
