"""The noise level of images with and without structure, against levels that are known."""

from __future__ import annotations

import numpy as np
import pytest
from noise_fields import SPECTRA, field

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics import local_sd, noise_map
from ct_measure_plugin.physics.local_sd import local_mean_and_sd
from ct_measure_plugin.physics.results import NotMeasured

SPACING = (0.5, 0.5)


def codes(result) -> set[str]:
    return {caution.code for caution in result.cautions}


@pytest.mark.parametrize("window", [3, 7, 11])
def test_local_sds_are_those_of_numpy(window):
    """Sample SD of every window, one by one; single precision with the level taken off."""
    values = np.random.default_rng(1).normal(60, 12, (40, 37)).astype(np.float32)
    found = local_sd(values, window_px=window)
    view = np.lib.stride_tricks.sliding_window_view(values.astype(float), (window, window))
    half = window // 2
    inner = found[half:-half, half:-half]
    assert inner == pytest.approx(view.std(axis=(2, 3), ddof=1), rel=2e-5)
    assert np.isnan(found).sum() == 40 * 37 - inner.size
    mean, sd = local_mean_and_sd(values, window, level=60.0)
    assert mean[half:-half, half:-half] == pytest.approx(view.mean(axis=(2, 3)), rel=1e-6)
    assert sd[half:-half, half:-half] == pytest.approx(view.std(axis=(2, 3), ddof=1), rel=2e-6)


def test_white_noise_has_the_mode_of_a_chi_distribution():
    """SD 12, windows of 9 × 9: 12 √(79/80) = 11.925, the mode of χ with 80 degrees of freedom."""
    rng = np.random.default_rng(2)
    found = [
        noise_map(40 + rng.normal(0, 12, (512, 512)), spacing_mm=SPACING, window_px=9)
        for _ in range(6)
    ]
    modes = np.array([f.global_noise.value for f in found])
    # 1 % is the claim; the scatter of one is 0.2 %
    assert modes == pytest.approx(11.925, rel=0.01)
    assert modes.mean() == pytest.approx(11.925, rel=0.002)
    z = [(f.noise_sd.value - 12) / f.noise_sd.uncertainty for f in found]
    assert np.abs(z).max() < 3.5
    assert found[0].windows.value == (512 - 8) ** 2


def test_structure_leaves_the_mode_alone():
    """30 % of the area swings by 40 HU: the SD of all pixels is 40 % too high, the level is not."""
    rng = np.random.default_rng(3)
    y, x = np.mgrid[:512, :512]
    wave = np.where(x < 154, 40 * np.sin(y / 6) * np.sin(x / 5), 0)
    image = 30 + wave + rng.normal(0, 12, (512, 512))
    found = noise_map(image, spacing_mm=SPACING, window_px=9)
    assert image.std() > 16
    assert found.global_noise.value == pytest.approx(11.925, rel=0.01)


def test_a_body_with_organs_bones_and_air():
    """Windows count by their mean: air and bone, and the windows across their borders, do not."""
    rng = np.random.default_rng(4)
    y, x = np.mgrid[:256, :256] * 1.0
    body = np.where(np.hypot((y - 128) / 0.8, x - 128) < 110, 50.0, -1000.0)
    body[np.hypot(y - 90, x - 100) < 22] = 70
    body[np.hypot(y - 150, x - 160) < 18] = 900
    body[np.hypot(y - 120, x - 190) < 25] = -850
    noise = field(rng, (3, 320, 320), (5.0, 0.5, 0.5), lambda f: 500.0 + 0 * f)[:, :256, :256]
    found = noise_map(body + noise, spacing_mm=SPACING, z_mm=[0, 5, 10])
    assert found.global_noise.value == pytest.approx(noise.std(), rel=0.02)
    assert found.noise_along_z.y == pytest.approx(noise.std(), rel=0.03)
    air = noise_map(body + noise, spacing_mm=SPACING, range_hu=(-1050, -950))
    assert air.global_noise.value == pytest.approx(noise.std(), rel=0.03)
    picture = found.sd_map
    assert picture.values[128, 128] > 0
    assert picture.values[2, 2] == 0
    assert picture.values[150, 160] == 0


@pytest.mark.parametrize("name", ["white", "ramp"])
def test_the_uncertainty_is_the_scatter(name):
    rng = np.random.default_rng(5)
    found = [
        noise_map(field(rng, (320, 320), SPACING, SPECTRA[name])[:256, :256], spacing_mm=SPACING)
        for _ in range(40)
    ]
    scatter = np.std([f.global_noise.value for f in found])
    stated = np.sqrt(np.mean([f.global_noise.uncertainty**2 for f in found]))
    # 40 fix the scatter to 11 %; a share of blocks differs from that of windows by as much
    assert stated == pytest.approx(scatter, rel=0.35)


def test_the_region_decides_where_to_look():
    image = np.random.default_rng(6).normal(20, 10, (256, 256))
    image[:, 128:] += np.random.default_rng(7).normal(0, 20, (256, 128))
    inside = np.zeros((256, 256), dtype=bool)
    inside[:, :128] = True
    left = noise_map(image, spacing_mm=SPACING, inside=inside)
    assert left.noise_sd.value == pytest.approx(10, rel=0.02)
    right = noise_map(image, spacing_mm=SPACING, inside=~inside)
    assert right.noise_sd.value == pytest.approx(np.hypot(10, 20), rel=0.02)
    both = noise_map(image, spacing_mm=SPACING)
    assert "several-noise-levels" in codes(both)
    assert "several-noise-levels" not in codes(left)


def test_a_hole_without_values_counts_as_no_window():
    stack = np.random.default_rng(9).normal(20, 10, (2, 300, 300))
    stack[1, 100:110, 100:110] = np.nan
    found = noise_map(stack, spacing_mm=SPACING)
    side = 10 + 11 - 1  # windows of 11 pixels that meet the hole
    whole = noise_map(stack[:1].repeat(2, axis=0), spacing_mm=SPACING)
    assert whole.windows.value - found.windows.value == side**2
    assert np.isfinite(found.sd_map.values).all()
    assert abs(found.noise_sd.value - 10) < 4 * found.noise_sd.uncertainty


def test_few_windows_are_cautioned_and_fewer_refused():
    image = np.random.default_rng(8).normal(20, 10, (50, 50))
    assert "few-windows" in codes(noise_map(image, spacing_mm=SPACING))
    refused = noise_map(image[:25, :25], spacing_mm=SPACING)
    assert isinstance(refused, NotMeasured)
    assert "225 windows" in refused.reason
    assert isinstance(noise_map(np.zeros((90, 90)), spacing_mm=SPACING), NotMeasured)


def test_misuse_names_the_argument():
    image = np.zeros((64, 64))
    with pytest.raises(ArgumentError, match="'window_px' must be odd"):
        noise_map(image, spacing_mm=SPACING, window_px=8)
    with pytest.raises(ArgumentError, match="'range_hu' must rise"):
        noise_map(image, spacing_mm=SPACING, range_hu=(5, 5))
    with pytest.raises(ArgumentError, match="'inside' must be of bool"):
        noise_map(image, spacing_mm=SPACING, inside=image)
    with pytest.raises(ArgumentError, match="'image' must have shape"):
        local_sd(np.zeros(5))
