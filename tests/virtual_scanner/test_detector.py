"""Counts, faults and calibration of the detector."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.virtual_scanner.detector import Detector, read_out
from ct_measure_plugin.virtual_scanner.geometry import ParallelBeam

BEAM = ParallelBeam(views=600, channels=50, pitch_mm=1.0)


def _read(p, detector, seed=1):
    values = np.full((BEAM.views, BEAM.channels), float(p))
    return read_out(values, detector, BEAM, thickness_mm=2.0, rng=np.random.default_rng(seed))


@pytest.mark.parametrize("electronic", [0.0, 30.0])
def test_noise_follows_counts(electronic):
    """Mean p + 1/2N and variance 1/N + σ²/N² of −ln(N/N₀) for Poisson N.

    30 000 readings: the sample variance is within 2 % (2.5 σ); the mean within 3 standard errors.
    """
    detector = Detector(quanta_per_mm2=2000.0, dose=1.5, electronic_quanta=electronic)
    counts = 2000.0 * 1.5 * 1.0 * 2.0 * np.exp(-1.5)
    found = _read(1.5, detector).line_integral
    variance = 1.0 / counts + (electronic / counts) ** 2
    expected = float(detector.variance(np.array(1.5), 6000.0))
    assert expected == pytest.approx(variance, rel=1e-12)
    assert found.var() == pytest.approx(variance, rel=0.02)
    bias = 0.5 * variance  # second order of the logarithm
    assert found.mean() == pytest.approx(1.5 + bias, abs=3 * np.sqrt(variance / 30_000))


def test_without_quanta_the_reading_is_exact():
    np.testing.assert_allclose(_read(2.3, Detector()).line_integral, 2.3, rtol=1e-14)


def test_a_drifted_channel_reads_too_little_by_the_logarithm_of_its_gain():
    found = _read(1.0, Detector(gain_errors=((7, 0.01), (9, -0.02)))).line_integral
    np.testing.assert_allclose(found[:, 7], 1.0 - np.log(1.01), rtol=1e-12)
    np.testing.assert_allclose(found[:, 9], 1.0 - np.log(0.98), rtol=1e-12)
    np.testing.assert_allclose(np.delete(found, [7, 9], axis=1), 1.0, rtol=1e-12)


def test_the_air_calibration_has_noise_of_its_own_that_every_view_shares():
    """Its SD is 1/√(N₀ n); over 50 channels the sample SD is within 30 % (3 σ)."""
    found = _read(0.0, Detector(quanta_per_mm2=1e9, air_views=4)).line_integral
    columns = found.mean(axis=0)
    quantum = 1.0 / np.sqrt(2e9 * 4)
    assert columns.std(ddof=1) == pytest.approx(quantum, rel=0.3)
    detector = Detector(quanta_per_mm2=1e9, air_views=4)
    alone = Detector(quanta_per_mm2=1e9)
    extra = detector.variance(np.zeros(1), 2e9) - alone.variance(np.zeros(1), 2e9)
    np.testing.assert_allclose(extra, quantum**2, rtol=1e-6)


def test_a_starved_reading_is_taken_for_one_quantum():
    reading = _read(20.0, Detector(quanta_per_mm2=1000.0))
    assert reading.starved == reading.line_integral.size
    np.testing.assert_allclose(reading.line_integral, np.log(2000.0), rtol=1e-12)
    assert _read(1.0, Detector(quanta_per_mm2=1000.0)).starved == 0


def test_a_dead_channel_is_starved_or_mended():
    left = _read(1.0, Detector(quanta_per_mm2=1e6, dead_channels=(5,))).line_integral
    np.testing.assert_allclose(left[:, 5], np.log(2e6), rtol=1e-12)
    slope = np.tile(np.linspace(0.0, 1.0, BEAM.channels), (BEAM.views, 1))
    mended = read_out(
        slope,
        Detector(dead_channels=(5, 6), mend_dead=True),
        BEAM,
        thickness_mm=1.0,
        rng=np.random.default_rng(0),
    )
    np.testing.assert_allclose(mended.line_integral, slope, atol=1e-12)
    assert mended.starved == 2 * BEAM.views


def test_the_seed_makes_the_noise():
    detector = Detector(quanta_per_mm2=1000.0)
    first = _read(1.0, detector, 5).line_integral
    np.testing.assert_array_equal(first, _read(1.0, detector, 5).line_integral)
    other = _read(1.0, detector, 6).line_integral
    assert abs(np.corrcoef(first.ravel(), other.ravel())[0, 1]) < 0.02  # 3.5 σ of 30 000 pairs


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: Detector(quanta_per_mm2=0.0), "'quanta_per_mm2' must be greater than 0 or None"),
        (lambda: Detector(dose=0.0), "'dose' must be greater than 0"),
        (lambda: Detector(electronic_quanta=-1.0), "'electronic_quanta' must not be negative"),
        (lambda: Detector(air_views=0), "'air_views' must be at least 1 or None"),
        (lambda: Detector(gain_errors=((1, -1.0),)), "'gain_errors' must each be greater"),
        (lambda: _read(1.0, Detector(gain_errors=((50, 0.1),))), "must name channels 0 to 49"),
        (lambda: _read(1.0, Detector(dead_channels=(-1,))), "'dead_channels' must name channels"),
    ],
)
def test_misuse_is_named(make, words):
    with pytest.raises(ArgumentError, match=words):
        make()
