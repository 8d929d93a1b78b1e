"""What the spectrum says about its own uncertainty, and what it refuses."""

from __future__ import annotations

import numpy as np
import pytest
from noise_fields import SPECTRA, cut, field
from scipy import ndimage

from ct_measure_plugin.physics import noise_power
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.shared_pixels import places_from_pixels

SPACING = (0.5, 0.5)


def codes(result) -> set[str]:
    return {caution.code for caution in result.cautions}


def stated_bands(name: str, step: int, placed: bool, repeats: int = 80) -> tuple[float, float]:
    """Return how often value ± 1.96 uncertainties holds the true NPS, over rings and repeats, and
    the same for the SD."""
    rng = np.random.default_rng(21)
    true_sd = None
    hits, sd_hits = [], []
    for _ in range(repeats):
        image = field(rng, (288, 288), SPACING, SPECTRA[name])[:256, :256]
        patches, corners = cut(image, 64, step)
        found = noise_power(patches, spacing_mm=SPACING, corners=corners if placed else None)
        kept = found.radial.x >= found.lowest_frequency.value
        error = found.radial.y - SPECTRA[name](found.radial.x)
        hits.append(np.abs(error)[kept] < 1.96 * found.radial.y_uncertainty[kept])
        if true_sd is None:
            f = np.hypot(*np.meshgrid(*[np.fft.fftfreq(1024, 0.5)] * 2))
            true_sd = np.sqrt(SPECTRA[name](f).mean() / 0.25)
        sd_hits.append(abs(found.sd.value - true_sd) < 1.96 * found.sd.uncertainty)
    return float(np.mean(hits)), float(np.mean(sd_hits))


@pytest.mark.parametrize("step", [64, 32])
def test_stated_bands_hold_the_truth(step):
    """Nominal 95 %, with overlap and without; 30 repeats of about 30 rings, half of them
    independent, fix the share to 1.0 %."""
    share, sd_share = stated_bands("ramp", step, placed=True, repeats=30)
    assert 0.93 <= share <= 0.97
    assert sd_share >= 0.85  # 30 repeats fix this one to 4 %


@pytest.mark.long
@pytest.mark.parametrize("name", SPECTRA)
@pytest.mark.parametrize(("step", "placed"), [(64, True), (32, True), (32, False)], ids=str)
def test_stated_bands_hold_the_truth_for_every_texture(name, step, placed):
    """The same for all spectra, and for overlaps that the pixels tell; 0.6 %."""
    share, sd_share = stated_bands(name, step, placed)
    assert 0.93 <= share <= 0.97
    assert sd_share >= 0.9  # 80 repeats fix this one to 2.5 %


def test_overlaps_that_the_pixels_tell_give_the_same_doubt():
    image = field(np.random.default_rng(34), (192, 192), SPACING, SPECTRA["ramp"])[:160, :160]
    patches, corners = cut(image, 64, 32)
    told = noise_power(patches, spacing_mm=SPACING, corners=corners)
    found = noise_power(patches, spacing_mm=SPACING)
    assert found.radial.y_uncertainty == pytest.approx(told.radial.y_uncertainty, rel=1e-12)


def test_overlap_without_a_window_gains_nothing_and_says_so():
    """Half-overlapping patches without a window: 49 are worth hardly more than the 16 that lie
    apart. Welch 1967: the variance falls as if nothing were gained."""
    image = np.random.default_rng(22).normal(0, 10, (256, 256))
    patches, corners = cut(image, 64, 32)
    found = noise_power(patches, spacing_mm=SPACING, window="none", corners=corners)
    assert found.independent_patches.value == pytest.approx(16, rel=0.2)
    assert "patches-share-noise" in codes(found)
    tapered = noise_power(patches, spacing_mm=SPACING, corners=corners)
    assert tapered.independent_patches.value > 40


def test_the_overlap_factor_is_welchs():
    """One row of half-overlapping patches. For a single bin the variance of a mean of K segments
    grows by 1 + 2 ρ (K − 1)/K with ρ = 1/4 (flat window) and 1/36 (Hann): P. D. Welch, IEEE Trans.
    Audio Electroacoust. 15 (1967) 70."""
    from ct_measure_plugin.physics.patch_independence import independence_by_place
    from ct_measure_plugin.physics.patch_spectra import window_values

    k = 10
    corners = np.stack([np.zeros(k, int), np.zeros(k, int), 32 * np.arange(k)], axis=1)
    for kind, rho in (("none", 1 / 4), ("hann", 1 / 36)):
        w = window_values(kind, 64)
        found = independence_by_place(corners, (w, w), (64, 64), np.ones(1))
        assert found.kernel[0, 0] * k == pytest.approx(1 + 2 * rho * (k - 1) / k, rel=0.003)


def test_overlaps_are_recognised_by_shared_pixels():
    """Whatever the order, whole numbers or not; patches that share nothing are told apart."""
    rng = np.random.default_rng(23)
    image = np.rint(field(rng, (200, 200), SPACING, SPECTRA["ramp"]))
    patches, corners = cut(image, 64, 34)
    order = rng.permutation(len(patches))
    found = places_from_pixels(patches[order])
    true = corners[order]
    assert np.array_equal(found - found[0], true - true[0])
    assert places_from_pixels(cut(image, 64, 64)[0]) is None
    assert places_from_pixels(np.concatenate([patches[:1], image[None, 100:164, 100:164]])) is None


@pytest.mark.parametrize("placed", [True, False])
def test_correlated_slices_count_as_fewer(placed):
    """Thick slices at half their distance: neighbours correlate by 1/2, ρ² = 1/4."""
    rng = np.random.default_rng(24)
    thin = rng.normal(0, 10, (201, 32, 32))
    thick = (thin[1:] + thin[:-1]) / 2**0.5
    corners = np.stack([np.arange(200), np.zeros(200, int), np.zeros(200, int)], axis=1)
    found = noise_power(thick, spacing_mm=SPACING, corners=corners if placed else None)
    assert found.independent_patches.value == pytest.approx(200 / 1.5, rel=0.15)
    assert "patches-share-noise" in codes(found)
    apart = noise_power(thick[::2], spacing_mm=SPACING)
    assert apart.independent_patches.value == pytest.approx(100, rel=1e-9)


def test_repeat_scans_cancel_the_object_and_keep_the_level():
    """(I1 − I2)/√2 has the spectrum of one scan, to the lowest frequencies; three scans give twice
    as many independent patches."""
    rng = np.random.default_rng(25)
    y, x = np.mgrid[:32, :32]
    objects = 40.0 * np.sin(x / 4) * np.cos(y / 7) + np.arange(300)[:, None, None]
    scans = [objects + rng.normal(0, 10, (300, 32, 32)) for _ in range(3)]
    two = noise_power(scans[0], repeats=scans[1:2], detrend="repeat", spacing_mm=SPACING)
    assert two.radial.y[1:].mean() == pytest.approx(25, rel=0.02)
    assert two.lowest_frequency.value == two.radial.x[1]
    assert two.sd.value == pytest.approx(10, rel=0.02)
    three = noise_power(scans[0], repeats=scans[1:], detrend="repeat", spacing_mm=SPACING)
    assert three.patches.value == 600
    assert three.radial.y[1:].mean() == pytest.approx(25, rel=0.02)
    assert "repeat-difference" in codes(three)
    assert not noise_power(scans[0], spacing_mm=SPACING)  # the object is no noise


@pytest.mark.parametrize("placed", [True, False])
def test_slice_differences_put_their_factor_right(placed):
    """Neighbours that correlate by 1/2 lose half their variance in the difference."""
    rng = np.random.default_rng(26)
    thin = rng.normal(0, 10, (401, 32, 32))
    thick = (thin[1:] + thin[:-1]) / 2**0.5
    corners = np.stack([np.arange(400), np.zeros(400, int), np.zeros(400, int)], axis=1)
    found = noise_power(
        thick, spacing_mm=SPACING, detrend="slices", corners=corners if placed else None
    )
    assert found.sd.value == pytest.approx(10, rel=0.02)
    [note] = [c for c in found.cautions if c.code == "slice-difference"]
    assert "0.50" in note.text or "0.49" in note.text or "0.51" in note.text
    alike = np.repeat(thin[:50], 2, axis=0) + rng.normal(0, 0.5, (100, 32, 32))
    refused = noise_power(alike, spacing_mm=SPACING, detrend="slices")
    assert isinstance(refused, NotMeasured)
    assert "correlate by" in refused.reason


def false_alarms(name: str, repeats: int) -> int:
    rng = np.random.default_rng(27)
    found = 0
    for _ in range(repeats):
        patches, corners = cut(field(rng, (256, 256), SPACING, SPECTRA[name]), 32, 32)
        result = noise_power(patches, spacing_mm=SPACING, corners=corners)
        found += "nonstationary-noise" in codes(result)
    return found


def test_stationarity_is_judged_as_often_wrong_as_stated():
    """At 1 % a test, two or more in 30 come about once in 28 times."""
    assert false_alarms("ramp", 30) <= 1


@pytest.mark.long
@pytest.mark.parametrize("name", SPECTRA)
def test_stationarity_is_judged_as_often_wrong_as_stated_for_every_texture(name):
    assert false_alarms(name, 100) <= 4  # P(more) = 0.4 % at 1 %


def test_noise_that_changes_is_cautioned():
    rng = np.random.default_rng(28)
    noise = rng.normal(0, 10, (40, 64, 64)) * np.linspace(1, 1.3, 40)[:, None, None]
    assert "nonstationary-noise" in codes(noise_power(noise, spacing_mm=SPACING))
    corners = np.stack([np.arange(40) // 4, np.zeros(40, int), 64 * (np.arange(40) % 4)], axis=1)
    found = noise_power(noise, spacing_mm=SPACING, corners=corners)
    assert any("slice to slice" in c.text for c in found.cautions)


# --- refusals ------------------------------------------------------------------------------------


def refused(patches: np.ndarray, **more) -> str:
    found = noise_power(patches, spacing_mm=more.pop("spacing_mm", SPACING), **more)
    assert isinstance(found, NotMeasured), codes(found)
    assert found.remedy
    return found.reason


@pytest.mark.parametrize("name", SPECTRA)
def test_an_object_in_one_patch_is_refused_and_noise_alone_is_not(name):
    rng = np.random.default_rng(29)
    noise = cut(field(rng, (512, 512), SPACING, SPECTRA[name]), 64, 64)[0]
    assert noise_power(noise, spacing_mm=SPACING)
    y, x = np.mgrid[:64, :64]
    rod = noise.copy()
    rod[7] += 60.0 * (np.hypot(y - 20, x - 41) < 8)
    assert "structure" in refused(rod)
    edge = noise + 300.0 * (x + 0.2 * y > 40)
    assert "structure" in refused(edge)


def test_a_gentle_cup_is_detrended_not_refused():
    rng = np.random.default_rng(30)
    y, x = np.mgrid[:256, :256]
    cup = 20.0 * ((y - 128.0) ** 2 + (x - 128.0) ** 2) / 128**2
    image = field(rng, (288, 288), SPACING, SPECTRA["ramp"])[:256, :256]
    flat = noise_power(cut(image, 64, 64)[0], spacing_mm=SPACING)
    bowl = noise_power(cut(image + cup, 64, 64)[0], spacing_mm=SPACING)
    assert bowl.radial.y[2:] == pytest.approx(flat.radial.y[2:], rel=1e-6)


def test_clipped_and_padded_values_are_refused():
    rng = np.random.default_rng(31)
    noise = rng.normal(-1000, 20, (16, 32, 32))
    assert "clipped or padding" in refused(np.maximum(np.rint(noise), -1024))
    assert noise_power(np.rint(noise), spacing_mm=SPACING)  # rounding is no clipping
    padded = noise.copy()
    padded[3, :8] = -2000
    assert "clipped or padding" in refused(padded)
    noise[2, 0, 0] = np.nan
    assert "not finite" in refused(noise)
    still = rng.normal(size=(8, 16, 16))
    still[5] = 3.0
    assert "patch 5 holds one value only" in refused(still)


def test_slices_that_repeat_each_other_give_no_spectrum_along_z():
    rng = np.random.default_rng(32)
    noise = rng.normal(0, 10, (20, 64, 32, 32))
    smooth = ndimage.uniform_filter1d(noise, 24, axis=1)[:, 16:48]
    reason = refused(smooth, spacing_mm=(0.5, 0.5, 0.5))
    assert "independent ones" in reason


def test_few_patches_are_cautioned():
    noise = np.random.default_rng(33).normal(0, 10, (4, 16, 16))
    assert "few-patches" in codes(noise_power(noise, spacing_mm=SPACING))
    many = np.random.default_rng(33).normal(0, 10, (400, 16, 16))
    assert "few-patches" not in codes(noise_power(many, spacing_mm=SPACING))
