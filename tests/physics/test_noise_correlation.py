"""The standard error of a mean against ensembles of noise whose spectrum is known."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import fft, ndimage

from ct_measure_plugin.physics.coverage import plane_coverage
from ct_measure_plugin.physics.noise_correlation import doubt_of_mean, independent_doubt
from ct_measure_plugin.physics.regions import Disc


def test_white_noise_gives_the_textbook_standard_error():
    """s / sqrt(n): JCGM 100:2008, 4.2.3."""
    values = np.random.default_rng(1).normal(0, 10, 200)
    doubt = independent_doubt(values, np.ones(200))
    assert doubt.variance_of_mean == pytest.approx(values.var(ddof=1) / 200, rel=1e-12)
    assert doubt.power_samples == pytest.approx(200)


def gaussian_noise(rng: np.random.Generator, size: int, sigma_px: float) -> np.ndarray:
    return ndimage.gaussian_filter(rng.normal(0, 10, (size, size)), sigma_px, mode="wrap")


def test_gaussian_filtered_noise_has_its_closed_form_standard_error():
    """White noise of SD 10 on 0.5 mm pixels through a Gaussian of 1 mm, disc of 5 mm: the integral
    of S |2 J1(2πRf)/(2πRf)|² is 0.4972² HU² (closed form; independently computed)."""
    disc = Disc((12.5, 12.5), 5.0)
    cover = plane_coverage(disc, (51, 51), spacing_mm=(0.5, 0.5))
    rng = np.random.default_rng(2)
    stated, means = [], []
    for _ in range(150):
        field = gaussian_noise(rng, 204, 2.0)
        for i in range(0, 204, 51):
            for j in range(0, 204, 51):
                patch = field[i : i + 51, j : j + 51][cover.rows, cover.columns]
                doubt = doubt_of_mean(patch, cover.weights, (0.5, 0.5))
                stated.append(doubt.variance_of_mean)
                means.append(float(np.sum(patch * cover.weights) / cover.weights.sum()))
    # 2,400 means fix their SD to 1.4 %
    assert np.std(means) == pytest.approx(0.4972, rel=0.045)
    # each region holds few independent samples, so single estimates scatter; their mean must hold
    assert math.sqrt(np.mean(stated)) == pytest.approx(0.4972, rel=0.12)


@pytest.mark.parametrize("kind", ["smooth", "ramp"])
def test_the_naive_standard_error_would_be_wrong(kind):
    """Smooth noise makes s/sqrt(n) too small, ramp-filtered noise makes it too large."""
    rng = np.random.default_rng(3)
    n = 256
    frequency = np.hypot(*np.meshgrid(fft.fftfreq(n), fft.rfftfreq(n), indexing="ij"))
    gain = {
        "smooth": np.exp(-2 * (np.pi * 1.5 * frequency) ** 2),
        "ramp": np.sqrt(frequency) * np.exp(-((3 * frequency) ** 2) / 2),
    }[kind]
    cover = plane_coverage(Disc((32, 32), 20.0), (64, 64), spacing_mm=(1, 1))
    truth, mine, naive = [], [], []
    for _ in range(12):
        field = fft.irfft2(fft.rfft2(rng.standard_normal((n, n))) * gain, (n, n))
        for i in range(0, n, 64):
            for j in range(0, n, 64):
                patch = field[i : i + 64, j : j + 64][cover.rows, cover.columns]
                truth.append(np.sum(patch * cover.weights) / cover.weights.sum())
                mine.append(doubt_of_mean(patch, cover.weights, (1, 1)).variance_of_mean)
                naive.append(independent_doubt(patch, cover.weights).variance_of_mean)
    true, stated, textbook = np.std(truth), math.sqrt(np.mean(mine)), math.sqrt(np.mean(naive))
    if kind == "smooth":
        assert textbook < 0.4 * true
        assert stated == pytest.approx(true, rel=0.15)  # 192 means fix their SD to 5 %
    else:
        assert textbook > 1.5 * true
        assert true * 0.85 < stated < textbook
