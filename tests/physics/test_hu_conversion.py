"""Conversions between HU and μ, and between scanners, against tables and by drawing."""

from __future__ import annotations

from dataclasses import replace

import dask.array as da
import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.attenuation import MATERIALS, Material
from ct_measure_plugin.physics.hu_conversion import (
    hu_at_energy,
    hu_from_mu,
    hu_quantity,
    mu_from_hu,
    mu_quantity,
    mu_volume,
)
from ct_measure_plugin.physics.results import Quantity
from ct_measure_plugin.physics.volume import Source, Volume

# Hubbell and Seltzer, NIST SRD 126, cm²/g at 60 and 80 keV, total with coherent scattering.
NIST = {"H2O": (0.2059, 0.1837), "C5H8O2": (0.1924, 0.1751), "Al": (0.2778, 0.2018)}
DENSITY = {"H2O": 1.0, "C5H8O2": 1.19, "Al": 2.699}


@pytest.mark.parametrize("formula", NIST)
def test_hu_of_the_tables_mu_and_back(formula):
    """0.3 %: both μ and water's are printed with four digits."""
    for k, energy in enumerate((60.0, 80.0)):
        mu = NIST[formula][k] * DENSITY[formula]
        hu = 1000 * (mu / NIST["H2O"][k] - 1)
        assert float(mu_from_hu(hu, energy)) == pytest.approx(mu, rel=1e-3)
        assert float(hu_from_mu(mu, energy)) == pytest.approx(hu, abs=3e-3 * (hu + 1000))


def test_there_and_back_is_exact():
    hu = np.array([[-1000.0, -100.0], [0.0, 3000.0]])
    np.testing.assert_allclose(hu_from_mu(mu_from_hu(hu, 63.0), 63.0), hu, atol=1e-9)
    warm = Material("water", "H2O", 0.9982)
    assert float(mu_from_hu(0.0, 63.0, water=warm)) == pytest.approx(
        0.9982 * float(mu_from_hu(0.0, 63.0)), rel=1e-12
    )


def test_mu_is_as_uncertain_as_draws_say():
    """4,000 draws of CT number and energy: an SD to 1.1 %, the model is linear to 1 %."""
    rng = np.random.default_rng(1)
    stated = mu_quantity(Quantity(300.0, "HU", 4.0), Quantity(70.0, "keV", 1.5))
    hu, energy = rng.normal(300, 4, 4000), rng.normal(70, 1.5, 4000)
    mu = MATERIALS["water"].mu(energy) * (1 + hu / 1000)
    assert stated.uncertainty == pytest.approx(np.std(mu), rel=0.04)
    assert stated.value == pytest.approx(0.192852 * 1.3, rel=1e-4)


def test_a_ct_number_is_as_uncertain_as_draws_say():
    rng = np.random.default_rng(3)
    stated = hu_quantity(Quantity(0.25, "cm⁻¹", 0.001), Quantity(70.0, "keV", 1.0))
    mu, energy = rng.normal(0.25, 0.001, 4000), rng.normal(70, 1.0, 4000)
    hu = 1000 * (mu / MATERIALS["water"].mu(energy) - 1)
    assert stated.value == pytest.approx(1000 * (0.25 / 0.192852 - 1), abs=0.1)
    # an SD from 4,000 draws is known to 1.1 %
    assert stated.uncertainty == pytest.approx(np.std(hu), rel=0.04)


# Expected CT numbers at 60 and 80 keV by an independent script (tests/physics/test_attenuation.py).
@pytest.mark.parametrize(
    ("name", "at_60", "at_80"),
    [("PTFE", 972.1, 919.8), ("LDPE", -119.7, -86.9), ("aluminium", 2642.1, 1965.3)],
)
def test_a_material_reads_its_table_elsewhere(name, at_60, at_80):
    moved = hu_at_energy(MATERIALS[name], 60.0, 80.0)
    assert moved.here.value == pytest.approx(at_60, abs=0.1)
    assert moved.there.value == pytest.approx(at_80, abs=0.1)
    assert moved.difference.value == pytest.approx(at_80 - at_60, abs=0.2)


def test_a_reading_carries_its_own_density_over():
    """PTFE of 2.20 g/cm³, read: what it reads elsewhere does not ask for its density."""
    dense = Material("PTFE", "C2F4", 2.20)
    moved = hu_at_energy(MATERIALS["PTFE"], 60.0, 80.0, hu=float(dense.hu(60.0)))
    assert moved.there.value == pytest.approx(float(dense.hu(80.0)), abs=1e-6)


@pytest.mark.parametrize("read", [None, Quantity(950.0, "HU", 5.0)])
def test_transfers_are_as_uncertain_as_draws_say(read):
    """4,000 draws: 1.1 % on an SD; 2 % for what is not linear."""
    rng = np.random.default_rng(2)
    material = MATERIALS["PTFE"]
    stated = hu_at_energy(material, Quantity(66.0, "keV", 1.0), Quantity(75.0, "keV", 2.0), hu=read)
    n = 4000
    first, second = rng.normal(66, 1, n), rng.normal(75, 2, n)
    density = 1 + 0.02 / 2.16 * rng.standard_normal(n)
    g1, g2 = (material.mu(e) / MATERIALS["water"].mu(e) for e in (first, second))
    if read is None:
        here, there = 1000 * (g1 * density - 1), 1000 * (g2 * density - 1)
    else:
        here = rng.normal(950, 5, n)
        there = (here + 1000) * g2 / g1 - 1000
    for drawn, one in (
        (here, stated.here),
        (there, stated.there),
        (there - here, stated.difference),
    ):
        assert one.uncertainty == pytest.approx(np.std(drawn), rel=0.05)


def test_the_same_energy_changes_nothing():
    moved = hu_at_energy(MATERIALS["PMMA"], 70.0, 70.0)
    assert moved.difference.value == 0.0
    assert moved.difference.uncertainty == 0.0


@pytest.mark.parametrize("lazy", [False, True])
def test_a_volume_becomes_mu(lazy):
    hu = np.array([[[-1000, 0], [126, -2000]]], np.int16)
    volume = Volume(
        da.from_array(hu) if lazy else hu,
        (2.0, 0.5, 0.5),
        padding_hu=np.array([[-2000.0, -2000.0]]),
        representable_hu=(-1000.0, 3095.0),
        source=Source(title="rod", content_digest="abc"),
    )
    found = mu_volume(volume, Quantity(70.0, "keV", 1.0))
    assert hasattr(found.hu, "dask") == lazy
    assert found.hu.dtype == np.float32
    values = np.asarray(found.hu)
    assert values[0, 0, 0] == 0.0
    assert values[0, 0, 1] == pytest.approx(0.192852, rel=1e-5)
    assert values[0, 1, 0] == pytest.approx(0.192852 * 1.126, rel=1e-5)
    assert found.unit == "cm⁻¹"
    assert found.padding(0).tolist() == [[False, False], [False, True]]
    assert found.representable_hu[0] == 0.0
    assert found.source.content_digest == ""
    assert found.source.title == "rod"
    [caution] = [c for c in found.cautions if c.code == "mu-scale"]
    # water's μ falls by 0.55 % a keV at 70 keV (NIST SRD 126: 0.2059 at 60, 0.1837 at 80 cm²/g)
    assert "70.0 ± 1.0 keV" in caution.text
    assert "0.55 %" in caution.text


def test_misuse_is_named():
    volume = Volume(np.zeros((1, 8, 8), np.int16), (1.0, 1.0, 1.0))
    with pytest.raises(ArgumentError, match="'volume' must be in HU, got 'cm⁻¹'"):
        mu_volume(replace(volume, unit="cm⁻¹"), 70.0)
    with pytest.raises(ArgumentError, match="'energy' must be in keV"):
        mu_volume(volume, Quantity(7e4, "eV"))
    with pytest.raises(ArgumentError, match="'energy_kev' must lie within"):
        mu_from_hu(0.0, 0.5)
