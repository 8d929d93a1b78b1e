"""Contrast and CNR against closed forms and the scatter of repeats."""

from __future__ import annotations

import math

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics import region_contrast, region_statistics
from ct_measure_plugin.physics.results import NotMeasured

SPACING = (0.5, 0.5)


def pixels(rng, level: float, sd: float, side: int = 24):
    return region_statistics(rng.normal(level, sd, (side, side)), spacing_mm=SPACING)


def test_the_definitions():
    """The three spreads that a CNR may divide by, and what the numbers are made of."""
    rng = np.random.default_rng(1)
    rod, water = pixels(rng, 80, 6), pixels(rng, -10, 9)
    size = rod.mean.value - water.mean.value
    so, sb = rod.sd.value, water.sd.value
    spread = {
        "background": sb,
        "mean": math.hypot(so, sb) / math.sqrt(2),
        "sum": math.hypot(so, sb),
    }
    for noise, divisor in spread.items():
        found = region_contrast(rod, [water], noise=noise)
        assert found.noise.value == pytest.approx(divisor, rel=1e-12)
        assert found.cnr.value == pytest.approx(abs(size) / divisor, rel=1e-12)
    assert found.difference.value == pytest.approx(size)
    assert found.contrast.value == pytest.approx(100 * size / (water.mean.value + 1000))
    assert found.snr.value == pytest.approx(rod.mean.value / so)
    assert found.attenuation_snr.value == pytest.approx((rod.mean.value + 1000) / so)
    assert found.detail_snr.value == pytest.approx(abs(size) / rod.mean.uncertainty)
    assert found.difference.uncertainty == pytest.approx(
        math.hypot(rod.mean.uncertainty, water.mean.uncertainty)
    )


def test_the_uncertainty_of_the_cnr_is_the_known_approximation():
    """(u/CNR)² = (SE_o² + SE_b²)/Δ² + 1/(2ν): the relative variance of an SD is 1/(2ν)."""
    rng = np.random.default_rng(2)
    rod, water = pixels(rng, 30, 10, 60), pixels(rng, 0, 10, 60)
    found = region_contrast(rod, [water])
    size = found.difference.value
    means = (rod.mean.uncertainty**2 + water.mean.uncertainty**2) / size**2
    expected = math.sqrt(means + 1 / (2 * 3600))
    # the SD's own uncertainty knows the sample's kurtosis
    assert found.cnr.uncertainty / found.cnr.value == pytest.approx(expected, rel=0.05)


#: 600 repeats fix a scatter to 3 %; Student's factor widens means of 256 pixels a little.
LOW, HIGH = 0.91, 1.12


def test_stated_uncertainties_match_the_scatter_of_repeats():
    rng = np.random.default_rng(3)
    pairs = [(pixels(rng, 60, 12, 16), pixels(rng, 0, 12, 16)) for _ in range(600)]
    off = {}
    for noise in ("background", "mean", "sum"):
        kept = [region_contrast(rod, [water], noise=noise) for rod, water in pairs]
        for name in ("difference", "contrast", "cnr", "snr", "attenuation_snr"):
            values = np.array([getattr(one, name).value for one in kept])
            stated = np.array([getattr(one, name).uncertainty for one in kept])
            ratio = math.sqrt(np.mean(stated**2)) / values.std()
            if not LOW < ratio < HIGH:
                off[noise, name] = ratio
    assert off == {}


def test_several_backgrounds_count_alike_and_their_scatter_is_doubt():
    rng = np.random.default_rng(4)
    rod = pixels(rng, 80, 5)
    level = [pixels(rng, value, 5) for value in (0.0, 0.0, 0.0, 0.0)]
    flat = region_contrast(rod, level)
    errors = [one.mean.uncertainty for one in level]
    assert flat.background_mean.value == pytest.approx(np.mean([b.mean.value for b in level]))
    assert flat.background_mean.uncertainty < 2 * math.hypot(*errors) / 4
    sloping = region_contrast(rod, [pixels(rng, value, 5) for value in (-12.0, 0.0, 12.0)])
    assert sloping.background_mean.uncertainty == pytest.approx(12 / math.sqrt(3), rel=0.1)
    assert sloping.background_sd.value == pytest.approx(5.0, rel=0.05)


def test_without_noise_there_is_no_cnr():
    flat = region_statistics(np.full((20, 20), 7), spacing_mm=SPACING)
    rod = pixels(np.random.default_rng(5), 80, 5)
    found = region_contrast(rod, [flat])
    assert isinstance(found, NotMeasured)
    assert "the SD is 0 within its uncertainty" in found.reason
    turned = region_contrast(flat, [rod])
    assert (turned.snr, turned.detail_snr, turned.attenuation_snr) == (None, None, None)
    assert turned.difference.value < -70


def test_other_units_have_no_attenuation():
    rng = np.random.default_rng(6)
    rod, water = (
        region_statistics(rng.normal(level, 1, (20, 20)), spacing_mm=SPACING, unit="1/m")
        for level in (22, 20)
    )
    found = region_contrast(rod, [water])
    assert (found.contrast, found.attenuation_snr) == (None, None)
    assert found.difference.unit == "1/m"


def test_misuse_names_the_argument():
    rod = pixels(np.random.default_rng(7), 80, 5)
    with pytest.raises(ArgumentError, match="'backgrounds' must hold at least one"):
        region_contrast(rod, [])
    with pytest.raises(ArgumentError, match="'noise' must be 'background', 'mean' or 'sum'"):
        region_contrast(rod, [rod], noise="both")
