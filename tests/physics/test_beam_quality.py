"""Energies from a beam's quality, against closed forms, a table, and another model of a tube."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import integrate

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.attenuation import MATERIALS
from ct_measure_plugin.physics.beam_quality import beam_quality, half_value_layer, tube_photons
from ct_measure_plugin.physics.ct_number_line import ct_number_line
from ct_measure_plugin.physics.kerma import energy_transfer_share, mass_energy_absorption_air
from ct_measure_plugin.physics.results import NotMeasured, Quantity
from ct_measure_plugin.physics.water_path import mean_water_path, water_equivalent_diameter
from ct_measure_plugin.virtual_scanner import tube_spectrum
from ct_measure_plugin.virtual_scanner.hardening import WaterCalibration

NAMES = ("air", "LDPE", "polystyrene", "PMMA", "POM", "PTFE", "polycarbonate", "nylon-6")
RODS = [MATERIALS[name] for name in NAMES]
PATH = Quantity(200.0, "mm", 20.0)

# J. H. Hubbell and S. M. Seltzer, NIST SRD 126: dry air, μ_en/ρ in cm²/g.
NIST_AIR = {
    15.0: 1.334,
    20.0: 0.5389,
    30.0: 0.1537,
    40.0: 0.06833,
    50.0: 0.04098,
    60.0: 0.03041,
    80.0: 0.02407,
    100.0: 0.02325,
    150.0: 0.02496,
}


@pytest.mark.parametrize("energy", NIST_AIR)
def test_energy_absorption_of_air(energy):
    """1.5 %: electrons are taken as free (the page of the function says 1.4 %)."""
    found = float(mass_energy_absorption_air(energy))
    assert found == pytest.approx(NIST_AIR[energy], rel=0.015)


@pytest.mark.parametrize("energy", [10.0, 60.0, 150.0])
def test_energy_transfer_is_the_integral_of_klein_and_nishina(energy):
    """dσ/dΩ ∝ k² (k + 1/k − sin²θ) with k = E'/E; what is transferred is 1 − k."""

    def part(theta, transferred):
        k = 1 / (1 + energy / 510.99895 * (1 - math.cos(theta)))
        weight = k**2 * (k + 1 / k - math.sin(theta) ** 2) * math.sin(theta)
        return weight * (1 - k) if transferred else weight

    share = (
        integrate.quad(part, 0, math.pi, args=(True,))[0]
        / integrate.quad(part, 0, math.pi, args=(False,))[0]
    )
    assert float(energy_transfer_share(energy)) == pytest.approx(share, rel=1e-6)


@pytest.mark.parametrize(
    ("energy", "mu_over_rho"), [(30.0, 1.128), (60.0, 0.2778), (100.0, 0.1704)]
)
def test_half_value_layer_of_one_energy(energy, mu_over_rho):
    """ln 2/μ of aluminium, NIST SRD 126."""
    exact = 10 * math.log(2) / (mu_over_rho * 2.699)
    assert half_value_layer(np.array([energy]), np.array([1.0])) == pytest.approx(exact, rel=2e-3)


def test_half_value_layers_grow_with_voltage_and_filter():
    layers = [[half_value_layer(*tube_photons(kv, al)) for al in (2.5, 5.0)] for kv in (80, 120)]
    assert layers[0][0] < layers[0][1] < layers[1][1]
    assert layers[0][0] < layers[1][0]
    # IEC 61267 RQR 6 and RQR 9: 80 and 120 kV with 3.01 and 5.00 mm (from memory); a diagnostic
    # tube's total filtration is 2.5 to 6 mm of aluminium
    assert (
        half_value_layer(*tube_photons(80.0, 2.5)) < 3.01 < half_value_layer(*tube_photons(80, 6))
    )
    assert half_value_layer(*tube_photons(120, 2.5)) < 5.0 < half_value_layer(*tube_photons(120, 6))


@pytest.mark.parametrize("kvp", [80.0, 120.0, 140.0])
@pytest.mark.parametrize("detector", ["energy integrating", "photon counting"])
def test_the_virtual_scanners_beam_has_the_energy_that_its_rods_show(kvp, detector):
    """Its spectrum is another implementation; its thin rods are read, and a line is fitted.

    0.1 keV: bins of 1 and 2 keV.
    """
    weighted = detector == "energy integrating"
    beam = tube_spectrum(kvp, aluminium_mm=7.0, energy_weighted=weighted)
    scanner = WaterCalibration(beam, path_mm=200.0)
    read = [scanner.thin_insert_hu(rod, 200.0) for rod in RODS]
    line = ct_number_line(read, RODS, hu_uncertainty=1.0, density_uncertainty_g_cm3=0.0)
    found = beam_quality(kvp, RODS, path_mm=PATH, filtration_mm=7.0, detector=detector)
    assert found.energy.value == pytest.approx(line.effective_energy.value, abs=0.1)
    assert found.water_energy.value == pytest.approx(scanner.effective_kev, abs=0.1)


def test_half_value_layer_and_filtration_are_two_words_for_one_beam():
    by_filter = beam_quality(120.0, RODS, path_mm=PATH, filtration_mm=7.0)
    by_layer = beam_quality(120.0, RODS, path_mm=PATH, hvl_mm=by_filter.half_value_layer.value)
    assert by_layer.filtration.value == pytest.approx(7.0, abs=0.01)
    assert by_layer.energy.value == pytest.approx(by_filter.energy.value, abs=0.01)


def test_the_doubt_holds_another_filter():
    """A beam behind copper whose half-value layer is entered as if it were aluminium's."""
    energies, photons = tube_photons(120.0, 2.0, copper_mm=0.15)
    layer = half_value_layer(energies, photons)
    found = beam_quality(120.0, RODS, path_mm=PATH, hvl_mm=layer)
    water = MATERIALS["water"].mu(energies)
    signal = photons * energies * np.exp(-water * 20.0)
    mean = signal @ water
    read = [1000 * (float(signal @ rod.mu(energies)) / mean - 1) for rod in RODS]
    line = ct_number_line(read, RODS, hu_uncertainty=1.0, density_uncertainty_g_cm3=0.0)
    assert abs(found.energy.value - line.effective_energy.value) < found.energy.uncertainty


def test_doubts_follow_what_is_doubtful():
    sure = beam_quality(120.0, RODS, path_mm=Quantity(200.0, "mm", 0.0), hvl_mm=7.0)
    vague = beam_quality(120.0, RODS, path_mm=Quantity(200.0, "mm", 60.0), hvl_mm=7.0)
    low, high = (
        beam_quality(120.0, RODS, path_mm=Quantity(p, "mm", 0.0), hvl_mm=7.0) for p in (140, 260)
    )
    part = math.sqrt(vague.energy.uncertainty**2 - sure.energy.uncertainty**2)
    assert part == pytest.approx((high.energy.value - low.energy.value) / 2, rel=0.02)


def test_impossible_beams_are_refused():
    found = beam_quality(80.0, RODS, path_mm=PATH, hvl_mm=12.0)
    assert isinstance(found, NotMeasured)
    assert "no aluminium filter gives a beam of 80 kV a half-value layer of 12 mm" in found.reason


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"kvp": 20.0}, "'kvp' must lie within 40 to 160 kV"),
        ({"hvl_mm": None}, "'hvl_mm' must be given"),
        ({"filtration_mm": 5.0}, "'hvl_mm' must be given, or else"),
        ({"hvl_mm": -1.0}, "'hvl_mm' must lie between 0 and 60 mm"),
        ({"path_mm": Quantity(-1.0, "mm", 0.0)}, "'path_mm' must not be negative"),
    ],
)
def test_misuse_is_named(change, said):
    given = {"kvp": 120.0, "materials": RODS, "path_mm": PATH, "hvl_mm": 7.0, **change}
    with pytest.raises(ArgumentError, match=said):
        beam_quality(given.pop("kvp"), given.pop("materials"), **given)


def test_water_equivalent_diameter_of_water_and_of_plastic():
    """PMMA of 60 mm radius and 126 HU: √1.126 times its diameter. 1 %: the raster."""
    y, x = np.mgrid[-90:91, -90:91]
    inside = np.hypot(y, x) < 60
    for hu in (0.0, 126.0):
        found = water_equivalent_diameter(np.where(inside, hu, -1000.0), (1.0, 1.0))
        assert found.value == pytest.approx(120 * math.sqrt(1 + hu / 1000), rel=0.01)
    assert isinstance(
        water_equivalent_diameter(np.full((20, 20), -1000.0), (1.0, 1.0)), NotMeasured
    )
    assert isinstance(mean_water_path(np.full((20, 20), -1000.0), (1.0, 1.0)), NotMeasured)


def test_mean_path_is_the_mean_chord_through_points_of_a_disc():
    """Drawn: 20,000 points and directions; a mean to 0.2 %."""
    rng = np.random.default_rng(1)
    r, phi = np.sqrt(rng.uniform(0, 1, 20000)), rng.uniform(0, math.pi, 20000)
    drawn = np.mean(2 * np.sqrt(1 - (r * np.sin(phi)) ** 2)) / 2  # in diameters
    y, x = np.mgrid[-90:91, -90:91]
    image = np.where(np.hypot(y, x) < 80, 0.0, -1000.0)
    assert mean_water_path(image, (1.0, 1.0)).value == pytest.approx(160 * drawn, rel=0.01)
