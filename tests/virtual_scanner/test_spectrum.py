"""Spectra and the beam-hardening step."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.attenuation import material, water_attenuation
from ct_measure_plugin.virtual_scanner.hardening import WaterCalibration
from ct_measure_plugin.virtual_scanner.phantom import AIR, WATER
from ct_measure_plugin.virtual_scanner.spectrum import Spectrum, monoenergetic, tube_spectrum


def test_kramers_without_filters_is_a_straight_line_in_energy():
    """Energy per interval is proportional to E₀ − E (Kramers 1923)."""
    beam = tube_spectrum(100.0, aluminium_mm=0.0)
    energies, shares = np.array(beam.energies_kev), np.array(beam.shares)
    np.testing.assert_allclose(shares / shares[0], (100.0 - energies) / (100.0 - energies[0]))
    counted = tube_spectrum(100.0, aluminium_mm=0.0, energy_weighted=False)
    np.testing.assert_allclose(
        np.array(counted.shares) * energies / np.sum(np.array(counted.shares) * energies), shares
    )


def test_filters_and_voltage_harden():
    means = [
        tube_spectrum(100.0, aluminium_mm=2.0).mean_kev,
        tube_spectrum(100.0, aluminium_mm=8.0).mean_kev,
        tube_spectrum(100.0, aluminium_mm=8.0, copper_mm=0.5).mean_kev,
        tube_spectrum(140.0, aluminium_mm=8.0, copper_mm=0.5).mean_kev,
    ]
    assert means == sorted(means)
    assert means[-1] > means[0] + 15
    assert tube_spectrum(140.0, copper_mm=0.5).name == "140 kV continuum, 6 mm Al + 0.5 mm Cu"


def test_water_is_corrected_to_its_path_whatever_its_length():
    """The table is a cubic spline with nodes every mm: 1e-7 of the path."""
    calibration = WaterCalibration(tube_spectrum(120.0), 200.0)
    paths = np.array([0.0, 3.3, 50.0, 200.0, 420.0])
    corrected = calibration.correct(calibration.reading(paths))
    per_mm = 0.1 * (calibration.mu_water - calibration.mu_air)
    np.testing.assert_allclose(corrected, per_mm * paths, rtol=1e-7, atol=1e-9)
    uncorrected = WaterCalibration(tube_spectrum(120.0), 200.0, "none")
    found = uncorrected.correct(uncorrected.reading(paths)) / per_mm
    assert found[3] == pytest.approx(200.0, rel=1e-9)
    assert found[2] > 50.0 + 0.5  # a soft beam reads too much
    assert found[4] < 420.0 - 1.0


def test_effective_energy_is_where_water_attenuates_as_the_hardened_beam():
    """Two lines: the weights are s e^{−μL}, so the mean μ is known by hand."""
    beam = Spectrum((60.0, 80.0), (0.5, 0.5))
    found = WaterCalibration(beam, 100.0).effective_kev
    over_air = WATER.mu([60.0, 80.0]) - AIR.mu([60.0, 80.0])
    weights = np.exp(-10.0 * over_air)
    mean = np.sum(weights * WATER.mu([60.0, 80.0])) / weights.sum()
    assert float(water_attenuation(found)) == pytest.approx(mean, rel=1e-9)
    hardened = [WaterCalibration(tube_spectrum(120.0), path).effective_kev for path in (10, 200)]
    assert hardened[1] > hardened[0] + 2
    assert WaterCalibration(monoenergetic(70.0)).effective_kev == 70.0


def test_a_thin_insert_reads_its_definition_at_one_energy():
    calibration = WaterCalibration(monoenergetic(70.0))
    for name in ("air", "PTFE", "water", "aluminium"):
        expected = float(material(name).hu(70.0))
        assert calibration.thin_insert_hu(material(name), 200.0) == pytest.approx(
            expected, abs=1e-9
        )


def test_a_thin_insert_is_the_limit_of_a_real_one():
    """Replace 0.01 mm of 200 mm of water by aluminium and read what the correction makes of it."""
    calibration = WaterCalibration(tube_spectrum(120.0), 200.0)
    energies = np.array(calibration.spectrum.energies_kev)
    excess = 0.001 * (material("aluminium").mu(energies) - WATER.mu(energies))
    beam = np.array(calibration.spectrum.shares) * np.exp(
        -20.0 * (WATER.mu(energies) - AIR.mu(energies))
    )
    reading = -np.log(np.sum(beam * np.exp(-excess)))
    water = float(calibration.reading(200.0))
    step = calibration.correct(np.array([reading])) - calibration.correct(np.array([water]))
    hu = 1000.0 * float(step[0]) / (0.001 * calibration.mu_water)
    # 0.1 %: the second order of 0.01 mm, and the table's spline
    assert calibration.thin_insert_hu(material("aluminium"), 200.0) == pytest.approx(hu, rel=1e-3)


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: tube_spectrum(10.0), "'kvp' must lie within 30 to 200 kV"),
        (lambda: tube_spectrum(100.0, aluminium_mm=-1.0), "'aluminium_mm' must not be negative"),
        (lambda: tube_spectrum(100.0, step_kev=0.0), "'step_kev' must lie in 0 < step"),
        (lambda: Spectrum((60.0,), (0.5,)), "'shares' must sum to 1"),
        (lambda: Spectrum((60.0,), (0.5, 0.5)), "'shares' must hold one share an energy"),
    ],
)
def test_misuse_is_named(make, words):
    with pytest.raises(ArgumentError, match=words):
        make()
