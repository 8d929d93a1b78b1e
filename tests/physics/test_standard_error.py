"""The standard error of a region's mean from a spectrum, against closed forms and scatter."""

from __future__ import annotations

import numpy as np
import pytest
from noise_fields import SPECTRA, cut, field

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics import noise_power, standard_error_from_nps
from ct_measure_plugin.physics.coverage import plane_coverage
from ct_measure_plugin.physics.regions import Disc

SPACING = (0.5, 0.5)


def spectrum_of(name, count=12, seed=41):
    rng = np.random.default_rng(seed)
    images = [field(rng, (448, 448), SPACING, SPECTRA[name])[:384, :384] for _ in range(count)]
    patches = np.concatenate([cut(image, 64, 64)[0] for image in images])
    return noise_power(patches, spacing_mm=SPACING), images


@pytest.mark.parametrize("side", [5, 20, 60, 100])
def test_white_noise_gives_sigma_over_root_n(side):
    noise, _ = spectrum_of("white")
    error = standard_error_from_nps(np.ones((side, side)), noise)
    assert error.value == pytest.approx(10 / side, rel=0.05)
    assert abs(error.value - 10 / side) < 3 * error.uncertainty


def test_gaussian_filtered_noise_has_its_closed_form():
    """White noise of SD 10 on 0.5 mm pixels through a Gaussian of 1 mm, disc of 5 mm: 0.4972 HU
    (integral of S |2 J1(2πRf)/(2πRf)|², independently computed)."""
    rng = np.random.default_rng(42)

    def truth(f):
        return 25.0 * np.exp(-((2 * np.pi * f) ** 2))

    images = [field(rng, (640, 640), SPACING, truth)[:512, :512] for _ in range(12)]
    patches = np.concatenate([cut(image, 64, 64)[0] for image in images])
    noise = noise_power(patches, spacing_mm=SPACING)
    cover = plane_coverage(Disc((12.5, 12.5), 5.0), (51, 51), spacing_mm=SPACING)
    error = standard_error_from_nps(cover, noise)
    # 768 patches: the lowest bins, which decide, are known to 2 %
    assert error.value == pytest.approx(0.4972, rel=0.03)


@pytest.mark.parametrize("radius_mm", [4.0, 12.0])
def test_it_foretells_the_scatter_of_means_in_ramp_noise(radius_mm):
    """Noise of filtered backprojection: means of equal discs scatter as its spectrum says."""
    noise, images = spectrum_of("ramp", count=30)
    side = int(4 * radius_mm) + 8
    cover = plane_coverage(Disc((side / 4, side / 4), radius_mm), (side, side), spacing_mm=SPACING)
    means = [
        np.sum(patch[cover.rows, cover.columns] * cover.weights) / cover.weights.sum()
        for image in images
        for patch in cut(image, side, side)[0]
    ]
    error = standard_error_from_nps(cover, noise)
    scatter = np.std(means)
    known = 1 / np.sqrt(2 * len(means))  # relative
    assert error.value == pytest.approx(scatter, rel=3 * known + 0.03)
    # ∬ S |W|² over the pixels' own frequencies, on a grid fine enough to be an integral
    f = np.fft.fftfreq(1024, 0.5)
    response = np.abs(np.fft.fft2(cover.weights, (1024, 1024))) ** 2 / cover.weights.sum() ** 2
    power = SPECTRA["ramp"](np.hypot(f[:, None], f[None, :]))
    expected = np.sqrt(np.sum(power * response)) / (1024 * 0.5)
    # the two lowest rings decide, and 1,080 patches know them to 1 %
    assert error.value == pytest.approx(expected, rel=0.04)
    assert abs(error.value - expected) < 3 * error.uncertainty


def test_misuse_names_the_argument():
    noise, _ = spectrum_of("white", count=1)
    with pytest.raises(ArgumentError, match="'coverage' must hold the weights of one slice"):
        standard_error_from_nps(np.ones((2, 4, 4)), noise)
    deep = noise_power(
        np.random.default_rng(1).normal(size=(8, 8, 16, 16)), spacing_mm=(1.0, 0.5, 0.5)
    )
    with pytest.raises(ArgumentError, match="'noise' must come from patches on one slice"):
        standard_error_from_nps(np.ones((4, 4)), deep)
