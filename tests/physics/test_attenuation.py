"""Attenuation coefficients against published tables."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError, UnknownNameError
from ct_measure_plugin.physics.attenuation import (
    MATERIALS,
    Material,
    ct_number,
    expected_hu,
    linear_attenuation,
    mass_attenuation,
    material,
    water_attenuation,
)

# Hubbell and Seltzer, NIST SRD 126, water, liquid: keV -> cm²/g, total with coherent scattering.
NIST_WATER = {
    10.0: 5.329,
    20.0: 0.8096,
    30.0: 0.3756,
    40.0: 0.2683,
    50.0: 0.2269,
    60.0: 0.2059,
    80.0: 0.1837,
    100.0: 0.1707,
    150.0: 0.1505,
}


@pytest.mark.parametrize(("energy", "table"), NIST_WATER.items())
def test_water_agrees_with_the_nist_table(energy, table):
    """0.1 %: both tables are fits to the same cross-sections; the last printed digit is 0.05 %."""
    assert float(mass_attenuation("H2O", energy)) == pytest.approx(table, rel=1e-3)


# Expected CT numbers at 50, 70 and 100 keV computed by an independent script with xraydb's
# element function and hand-entered weight fractions; HU definition with denominator μ_w.
EXPECTED = {
    "air": (-998.9, -998.9, -998.9),
    "polymethylpentene": (-237.7, -187.4, -164.2),
    "polypropylene": (-173.5, -118.9, -93.7),
    "LDPE": (-155.1, -99.3, -73.6),
    "polystyrene": (-72.5, -16.9, 8.5),
    "nylon-6": (38.2, 86.8, 109.1),
    "polycarbonate": (58.9, 104.1, 124.7),
    "PMMA": (87.6, 126.1, 143.7),
    "PET": (228.5, 265.5, 282.1),
    "POM": (320.2, 344.6, 355.6),
    "PTFE": (1029.1, 939.6, 898.2),
    "rigid PVC": (1772.5, 915.9, 525.4),
    "aluminium": (3378.5, 2220.4, 1694.2),
    "cortical bone": (2589.0, 1559.0, 1087.0),
}


@pytest.mark.parametrize("name", EXPECTED)
def test_library_reads_its_expected_hu(name):
    """0.1 HU is the rounding of the list, 1 HU for bone, which is listed without a decimal."""
    tolerance = 1.0 if name == "cortical bone" else 0.11
    found = MATERIALS[name].hu([50.0, 70.0, 100.0])
    np.testing.assert_allclose(found, EXPECTED[name], atol=tolerance)


def test_ptfe_by_the_nist_table_of_its_elements():
    """Polytetrafluoroethylene at 60 keV, NIST SRD 126: 0.1879 cm²/g (value from memory).

    0.5 %: the value was not looked up again.
    """
    assert float(mass_attenuation("C2F4", 60.0)) == pytest.approx(0.1879, rel=5e-3)


def test_formula_and_weight_fractions_agree():
    """H2O by weight: 2 x 1.008 / 18.015 hydrogen (IUPAC standard atomic weights)."""
    share = 2 * 1.008 / 18.015
    by_weight = mass_attenuation({"H": share, "O": 1 - share}, [40.0, 90.0])
    np.testing.assert_allclose(by_weight, mass_attenuation("H2O", [40.0, 90.0]), rtol=1e-4)


def test_shape_follows_the_energies():
    energies = np.array([[40.0, 50.0, 60.0], [70.0, 80.0, 90.0]])
    found = linear_attenuation("Al", energies, density_g_cm3=2.699)
    assert found.shape == (2, 3)
    assert float(found[1, 0]) == float(linear_attenuation("Al", 70.0, density_g_cm3=2.699))
    assert np.all(np.diff(found.ravel()) < 0)


def test_scale_is_zero_for_water_and_minus_1000_for_vacuum():
    mu_water = water_attenuation([50.0, 120.0])
    np.testing.assert_array_equal(ct_number(mu_water, mu_water), 0.0)
    np.testing.assert_array_equal(ct_number(0.0, mu_water), -1000.0)
    assert float(expected_hu("H2O", 65.0, density_g_cm3=1.01)) == pytest.approx(10.0, abs=1e-9)


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: mass_attenuation("H2O", 0.1), "'energy_kev' must lie within 1 to 500 keV"),
        (lambda: mass_attenuation("not a formula", 60.0), "'composition' must be a chemical"),
        (lambda: mass_attenuation({"H": 0.4}, 60.0), "sum to 1"),
        (lambda: mass_attenuation({}, 60.0), "sum to 1"),
        (lambda: mass_attenuation({"Qq": 1.0}, 60.0), "'composition' must name chemical elements"),
        (lambda: linear_attenuation("Al", 60.0, density_g_cm3=0.0), "must be greater than 0"),
        (lambda: Material("x", "Al", -1.0), "must be greater than 0, got -1.0"),
    ],
)
def test_misuse_is_named(call, words):
    with pytest.raises(ArgumentError, match=words):
        call()


def test_unknown_material_lists_the_known_ones():
    with pytest.raises(UnknownNameError, match=r"called 'gold'; there are: air, water"):
        material("gold")


def test_coefficients_cannot_be_spoilt_through_the_cache():
    first = mass_attenuation("Al", [60.0])
    first[:] = 0.0
    assert float(mass_attenuation("Al", [60.0])[0]) > 0.2
