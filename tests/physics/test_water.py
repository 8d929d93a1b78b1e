"""Water's density against published values."""

from __future__ import annotations

import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.water import water_density, water_hu

# Density of air-free water at 101 325 Pa, g/cm³, as handbooks print it (CRC Handbook of Chemistry
# and Physics, "Standard density of water"; values from memory).
HANDBOOK = {4.0: 0.99997, 10.0: 0.99970, 20.0: 0.99821, 25.0: 0.99705, 30.0: 0.99565, 37.0: 0.99333}


@pytest.mark.parametrize(("temperature", "density"), HANDBOOK.items())
def test_density_is_the_handbooks(temperature, density):
    """To the last printed digit, 1e-5 g/cm³, which is 0.01 HU."""
    assert water_density(temperature).value == pytest.approx(density, abs=1e-5)


def test_ct_number_follows_from_the_density():
    """By definition 1000 (ρ - 1) HU where water of 1 g/cm³ reads 0."""
    assert water_hu(20.0).value == pytest.approx(-1.79, abs=0.01)
    assert water_hu(37.0).value == pytest.approx(-6.67, abs=0.01)


def test_the_doubt_grows_with_that_of_the_temperature():
    """At 25 °C water expands by 0.000257 a kelvin (handbook value, from memory)."""
    known, vague = (water_density(25.0, u_temperature_c=u).uncertainty for u in (0.0, 2.0))
    assert known == pytest.approx(1e-4)
    assert (vague**2 - known**2) ** 0.5 == pytest.approx(2.0 * 0.000257, rel=0.01)


@pytest.mark.parametrize("temperature", [-0.1, 40.1, float("nan")])
def test_beyond_the_formula_is_misuse(temperature):
    with pytest.raises(ArgumentError, match="must lie within 0 to 40 °C"):
        water_density(temperature)


def test_a_negative_doubt_is_misuse():
    with pytest.raises(ArgumentError, match="must not be negative"):
        water_density(20.0, u_temperature_c=-1.0)
