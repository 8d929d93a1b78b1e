"""The noise a recipe promises, against ensembles of simulated scans."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from ct_measure_plugin.virtual_scanner import (
    WATER,
    Detector,
    FanBeam,
    Grid,
    Kernel,
    ParallelBeam,
    Part,
    Phantom,
    Recipe,
    SliceProfile,
    TabulatedMaterial,
    Truth,
    disc_rod,
    simulate_slice,
    tube_spectrum,
)

PIXELS, PIXEL_MM = 64, 0.5
BEAM = ParallelBeam(views=360, channels=200, pitch_mm=0.5)
WATER_DISC = Recipe(
    phantom=Phantom((Part(disc_rod((0.0, 0.0), 45.0), WATER),)),
    geometry=BEAM,
    detector=Detector(quanta_per_mm2=4e5),
    kernel=Kernel("hann", 1.0),
    grid=Grid(matrix=PIXELS, fov_mm=PIXELS * PIXEL_MM),
    calibration_path_mm=90.0,
)


def _ensemble(recipe, count):
    """Return noise images: repeat scans, less their mean, scaled to their variance."""
    memory = {}
    images = np.array(
        [simulate_slice(replace(recipe, seed=s), 0, memory=memory).hu for s in range(count)]
    )
    return (images - images.mean(axis=0)) * np.sqrt(count / (count - 1))


def _noise_power(images, pixel_mm):
    n = images.shape[1]
    window = np.outer(np.hanning(n + 1)[:n], np.hanning(n + 1)[:n])
    power = np.abs(np.fft.fft2(images * window)) ** 2
    return power.mean(axis=0) * pixel_mm**2 / np.sum(window**2)


def _through_the_window(truth, n, pixel_mm):
    """Return what the windowed periodogram of noise of the promised spectrum is on the average.

    The covariance at each lag times the window's autocorrelation, transformed back.
    """
    f = np.fft.fftfreq(2 * n, pixel_mm)
    promised = truth.nps_2d(f[:, None], f) - pixel_mm**2 / 12.0  # not rounded to whole HU here
    window = np.outer(np.hanning(n + 1)[:n], np.hanning(n + 1)[:n])
    overlap = np.fft.ifft2(np.abs(np.fft.fft2(window, (2 * n, 2 * n))) ** 2)
    expected = np.fft.fft2(np.fft.ifft2(promised) * overlap).real
    return expected[::2, ::2] / np.sum(window**2)


@pytest.mark.parametrize(
    "change",
    [
        {},
        {"kernel": Kernel("ramp", 1.0)},
        {"kernel": Kernel("enhancing", 1.0)},
        {"kernel": Kernel("butterworth", 1.0)},
        {"kernel": Kernel("ramp", 1.0), "grid": Grid(matrix=64, fov_mm=32.0, lookup="linear")},
        {"kernel": Kernel("ramp", 1.0), "grid": Grid(matrix=40, fov_mm=32.0, lookup="linear")},
        {"geometry": FanBeam(views=360, channels=220, pitch_mm=0.5)},
        {"spectrum": tube_spectrum(120.0)},
        {
            "detector": Detector(
                quanta_per_mm2=4e5, electronic_quanta=200.0, scatter_ratio=0.2, air_views=2000
            )
        },
    ],
    ids=[
        "hann", "ramp", "enhancing", "butterworth", "linear", "folded", "fan", "tube", "faults",
    ],
)  # fmt: skip
def test_noise_power_follows_ramp_filter_theory(change):
    """80 repeat scans; radial means from the second ring to 0.9 of the cut-off, within 10 %.

    The Hann window's own smearing of the spectrum is worked into the theory. It also correlates
    neighbouring bins: of the m bins of a ring, in conjugate pairs, m / (2 · 3.78) count (1.944 is
    the sum of its squared correlations in one dimension). Where that leaves a standard error
    above 2.9 %, 3.5 of them are allowed instead. Theory holds for the middle of the disc; over
    the patch the variance falls by up to 4 %.
    """
    recipe = replace(WATER_DISC, **change)
    n, pixel = recipe.grid.matrix, recipe.grid.pixel_mm
    power = _noise_power(_ensemble(recipe, 80), pixel)
    theory = _through_the_window(Truth(recipe), n, pixel)
    f = np.fft.fftfreq(n, pixel)
    ring = np.rint(np.hypot(f[:, None], f) * n * pixel).astype(int).ravel()
    size = np.bincount(ring)
    ratio = np.bincount(ring, power.ravel()) / np.bincount(ring, theory.ravel())
    axis = np.arange(size.size) / (n * pixel)
    limit = min(0.9 * recipe.kernel.cutoff_per_mm, 0.5 / pixel)
    used = (axis >= 2 / (n * pixel)) & (axis <= limit)
    allowed = np.maximum(Truth(recipe).nps_bound, 3.5 / np.sqrt(80 * size / (2 * 3.78)))
    assert np.all(np.abs(ratio - 1.0)[used] < allowed[used])
    assert ratio[used].mean() == pytest.approx(1.0, abs=0.04)


def test_the_radial_spectrum_is_the_mean_of_the_plane_and_integrates_to_the_variance():
    """Folding by pixels of 0.8 mm moves power about but loses none."""
    recipe = replace(WATER_DISC, grid=Grid(matrix=40, fov_mm=32.0))
    truth = Truth(recipe)
    f = (np.arange(256) + 0.5) / 256 * 1.25 - 0.625
    step = f[1] - f[0]
    total = float(truth.nps_2d(f[:, None], f).sum()) * step**2
    assert total == pytest.approx(truth.noise_sd() ** 2, rel=1e-3)
    fold = truth.nps(0.55) / Truth(WATER_DISC).nps(0.55)
    assert float(fold) > 1.1  # what lay beyond 0.625 mm⁻¹ is added
    low = Truth(WATER_DISC).nps([0.01, 0.02])
    # a ramp from 0, less the white noise of rounding; the Hann window bends it by 0.1 %
    assert (low[1] - 0.25 / 12) / (low[0] - 0.25 / 12) == pytest.approx(2.0, rel=2e-3)


def test_poisson_noise_of_a_water_cylinder():
    """R 100 mm, μ 0.0193 mm⁻¹, N₀ 10⁶, d = a = 1 mm, 720 views, Hann, linear: 3.098 HU.

    (π d σ²/M) ∫ K² 2π df with σ² = e^{2μR}/N₀, worked out independently. In the simulation the
    central 12 x 12 pixels of 40 scans, 4 % (some 600 independent areas: 3 % at 1 σ).
    """
    body = TabulatedMaterial("body", (1.0, 500.0), (0.193, 0.193))
    empty = TabulatedMaterial("empty", (1.0, 500.0), (0.0, 0.0))
    recipe = Recipe(
        phantom=Phantom((Part(disc_rod((0.0, 0.0), 100.0), body, empty),)),
        geometry=ParallelBeam(views=720, channels=230, pitch_mm=1.0),
        detector=Detector(quanta_per_mm2=1e6),
        kernel=Kernel("hann", 0.5),
        grid=Grid(matrix=12, fov_mm=12.0, lookup="linear"),
        water=body,
    )
    truth = Truth(recipe)
    assert np.sqrt(truth.noise_sd() ** 2 - 1 / 12) == pytest.approx(3.098, rel=2e-3)
    memory = {}
    images = np.array(
        [simulate_slice(replace(recipe, seed=s), 0, memory=memory).hu for s in range(40)]
    )
    noise = images - images.mean(axis=0)
    sd = np.sqrt(np.mean(noise**2) * 40 / 39)
    assert sd == pytest.approx(3.098, rel=0.04)


def _sd(recipe, count=30):
    return float(np.sqrt(np.mean(_ensemble(recipe, count) ** 2)))


def test_noise_scales_with_dose_thickness_and_cutoff():
    """σ ∝ D^−½ h^−½ w^−³ᐟ² (R. A. Brooks and G. Di Chiro, Med. Phys. 3, 1976, 237).

    Four times the dose or the thickness halves the noise; half the cut-off divides it by 2^1.5 =
    2.828. 2 %: ensembles of 30 patches, whose noise for one seed is drawn from the same readings
    where only the kernel differs.
    """
    small = replace(WATER_DISC, grid=Grid(matrix=48, fov_mm=24.0))
    base = _sd(small)
    dose = replace(small, detector=replace(small.detector, dose=4.0))
    thick = replace(small, profile=SliceProfile("rectangular", 4.0))
    soft = replace(small, kernel=Kernel("hann", 0.5))
    assert base / _sd(dose) == pytest.approx(2.0, rel=0.02)
    assert base / _sd(thick) == pytest.approx(2.0, rel=0.02)
    assert base / _sd(soft, 60) == pytest.approx(2.0**1.5, rel=0.02)
    promised = [np.sqrt(Truth(r).noise_sd() ** 2 - 1 / 12) for r in (small, dose, thick, soft)]
    np.testing.assert_allclose(promised[0] / np.array(promised[1:3]), 2.0, rtol=1e-3)
    # the fine lookup's sinc² weighs a little more at the higher cut-off
    assert promised[0] / promised[3] == pytest.approx(2.0**1.5, rel=0.01)


def test_noise_falls_towards_the_rim_as_promised():
    """At 30 mm of 45 the rays are shorter: the variance is 0.79 of that at the centre.

    Within 8 %: 60 scans of a patch of 12 mm; the spectrum is no longer isotropic, its integral
    still is the mean over the views.
    """
    at_rim = replace(WATER_DISC, grid=Grid(matrix=24, fov_mm=12.0, centre_mm=(0.0, 30.0)))
    truth = Truth(at_rim)
    promised = truth.line_integral_variance((0.0, 30.0)) / truth.line_integral_variance()
    assert promised < 0.9
    middle = replace(WATER_DISC, grid=Grid(matrix=24, fov_mm=12.0))
    found = _sd(at_rim, 60) ** 2 / _sd(middle, 60) ** 2
    assert found == pytest.approx(promised, rel=0.08)


def test_a_scan_without_quanta_has_no_noise():
    quiet = Truth(replace(WATER_DISC, detector=Detector()))
    assert quiet.noise_sd() == pytest.approx(np.sqrt(1 / 12))  # rounding to whole HU
