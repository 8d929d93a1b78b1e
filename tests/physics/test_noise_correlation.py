"""The standard error of a mean against ensembles of noise whose spectrum is known."""

from __future__ import annotations

import math

import numpy as np
import pytest
from noise_discs import FILTERS, SIDE, Discs, discs, fields
from scipy import fft, special, stats

from ct_measure_plugin.physics.coverage import plane_coverage
from ct_measure_plugin.physics.noise_correlation import (
    _doubt_of_many,
    doubt_of_mean,
    independent_doubt,
)
from ct_measure_plugin.physics.noise_spectra import library
from ct_measure_plugin.physics.regions import Disc


@pytest.mark.parametrize("radius", [16.0, 25.0])
@pytest.mark.parametrize("kind", FILTERS)
def test_the_standard_error_covers_the_truth(kind, radius):
    """Nominal 95 % hold the truth 93 to 97 % of the time."""
    found = discs(kind, radius, count=320, seed=20)
    # averaged over the known distribution of the mean, 320 discs fix the share to 0.3 %; counted,
    # to 1.2 %, and one and a half such steps are let pass
    assert 0.93 <= found.expected() <= 0.97
    assert 0.93 - 0.018 <= found.covered() <= 0.97 + 0.018


@pytest.mark.parametrize("kind", ["white", "smoother", "ramp with Hann"])
def test_the_periodogram_covers_the_truth(kind):
    """A disc of 31 px, with the periodogram alone: nominal 95 % hold the truth 93 to 97 %."""
    cover, residuals = periodogram_discs(kind, 31.0, 48)
    doubts = [_doubt_of_many(x, cover, (1.0, 1.0), cover.sum(), (1.0, 1.0)) for x in residuals]
    found = Discs(kind, cover[0], np.zeros(len(doubts)), doubts)
    # 48 discs fix the average over the known distribution of the mean to 0.5 %
    assert 0.93 <= found.expected() <= 0.975


def periodogram_discs(kind: str, radius: float, count: int) -> tuple[np.ndarray, np.ndarray]:
    """Return the weights (1, ny, nx) and the weighted residuals (count, 1, ny, nx)."""
    cover = plane_coverage(Disc((32.3, 31.8), radius), (64, 64), spacing_mm=(1, 1)).weights
    images = fields(kind, -(-count // 16), seed=25)
    patches = images.reshape(-1, 4, 64, 4, 64).swapaxes(2, 3).reshape(-1, 64, 64)
    patches = patches[:count, : cover.shape[0], : cover.shape[1]]
    means = np.sum(patches * cover, axis=(1, 2)) / cover.sum()
    return cover[None], ((patches - means[:, None, None]) * cover)[:, None]


@pytest.mark.parametrize("kind", FILTERS)
def test_the_independent_samples_are_those_of_the_spectrum(kind):
    """W² / Σ rho² R, computed from the known filter."""
    cover = plane_coverage(Disc((32.3, 31.8), 20.0), (64, 64), spacing_mm=(1, 1)).weights
    rho = fft.irfft2(FILTERS[kind] ** 2, (SIDE, SIDE))
    pairs = fft.irfft2(np.abs(fft.rfft2(cover, (SIDE, SIDE))) ** 2, (SIDE, SIDE))
    truth = cover.sum() ** 2 / np.sum((rho / rho[0, 0]) ** 2 * pairs)
    doubts = discs(kind, 20.0, count=96, seed=22).doubts
    stated = np.median([doubt.power_samples for doubt in doubts])
    # 96 discs; the library's roll-offs fit each spectrum to a few percent
    assert stated == pytest.approx(truth, rel=0.10)


def test_white_noise_gives_the_textbook_standard_error():
    """s / sqrt(n), widened by Student's factor: JCGM 100:2008, 4.2.3 and G.3."""
    values = np.random.default_rng(1).normal(0, 10, 200)
    doubt = independent_doubt(values, np.ones(200))
    factor = stats.t.ppf(0.975, 199) / stats.norm.ppf(0.975)
    assert doubt.variance_of_mean == pytest.approx(
        factor**2 * values.var(ddof=1) / 200,
        rel=1e-4,  # the factor is read from a table
    )
    assert doubt.power_samples == pytest.approx(200)
    assert doubt.freedom == pytest.approx(199)


def test_gaussian_filtered_noise_has_its_closed_form_standard_error():
    """White noise of SD 10 HU on 0.5 mm pixels through a Gaussian of 0.5 mm has the spectrum
    25 exp(-4π² 0.25 f²) HU² mm²; the variance of the mean over a disc of 15 mm is its integral
    times (2 J1(2πRf)/(2πRf))²."""
    rng = np.random.default_rng(2)
    disc = Disc((16.0, 16.0), 15.0)
    cover = plane_coverage(disc, (64, 64), spacing_mm=(0.5, 0.5))
    f = np.linspace(0, 1.0, 20001)[1:]
    window = (2 * special.j1(2 * np.pi * 15 * f) / (2 * np.pi * 15 * f)) ** 2
    spectrum = 25.0 * np.exp(-4 * (np.pi * 0.5 * f) ** 2)
    truth = math.sqrt(float(np.sum(spectrum * window * 2 * np.pi * f) * (f[1] - f[0])))
    stated = []
    for _ in range(8):
        field = fft.irfft2(fft.rfft2(rng.normal(0, 10, (SIDE, SIDE))) * FILTERS["smooth"])
        for i in range(0, SIDE, 64):
            for j in range(0, SIDE, 64):
                patch = field[i : i + 64, j : j + 64][cover.rows, cover.columns]
                doubt = doubt_of_mean(patch, cover.weights, (0.5, 0.5))
                widened = stats.t.ppf(0.975, doubt.freedom) / stats.norm.ppf(0.975)
                stated.append(math.sqrt(doubt.variance_of_mean) / widened)
    # 128 single estimates, each with a scatter of 15 %, fix their median to 1.7 %
    assert np.median(stated) == pytest.approx(truth, rel=0.04)


@pytest.mark.parametrize("kind", ["smooth", "ramp"])
def test_the_naive_standard_error_would_be_wrong(kind):
    """Smooth noise makes s/sqrt(n) too small, ramp-filtered noise makes it too large."""
    found = discs(kind, 20.0, count=128, seed=3)
    sd = math.sqrt(float(np.mean(FILTERS[kind] ** 2)))
    naive = sd / math.sqrt(found.weights.sum())
    true, stated = np.std(found.means), np.median(found.errors)
    if kind == "smooth":
        assert naive < 0.4 * true
    else:
        assert naive > 1.5 * true
    assert abs(math.log(stated / true)) < 0.5 * abs(math.log(naive / true))


def test_scale_and_pixel_size_do_what_they_must():
    rng = np.random.default_rng(4)
    noise = fft.irfft2(fft.rfft2(rng.standard_normal((SIDE, SIDE))) * FILTERS["smooth"])[:40, :40]
    plain = doubt_of_mean(noise, np.ones((40, 40)), (1.0, 1.0))
    scaled = doubt_of_mean(7 * noise, np.ones((40, 40)), (0.25, 0.25))
    assert scaled.variance_of_mean == pytest.approx(49 * plain.variance_of_mean, rel=1e-9)
    assert scaled.power_samples == pytest.approx(plain.power_samples, rel=1e-9)
    assert scaled.reach == pytest.approx(plain.reach / 4)


def test_slices_that_share_their_noise_count_less():
    """Each slice of noise written twice: half as many independent slices."""
    rng = np.random.default_rng(5)
    once = rng.standard_normal((6, 24, 24))
    twice = np.repeat(once, 2, axis=0)
    alone = doubt_of_mean(once, np.ones(once.shape), (1.0, 1.0, 1.0))
    doubled = doubt_of_mean(twice, np.ones(twice.shape), (1.0, 1.0, 1.0))
    ratio = doubled.variance_of_mean / alone.variance_of_mean
    # lag 1: correlation 1 between half the pairs, so the factor is 1 + 11/12 over twice the slices
    assert ratio == pytest.approx(1.0, abs=0.12)


def test_the_library_holds_spectra():
    """No spectrum is negative, each has unit variance, the priors add up to 1."""
    shelf = library()
    spectra = shelf.coefficients @ shelf.principal
    assert spectra.min() > -1e-4 * spectra.max()
    assert np.exp(shelf.log_prior).sum() == pytest.approx(1.0)
    # times ring areas they sum to the variance: 1 for those without a floor, whose ring areas
    # were normalised; the area of the resolved square for the floors
    np.testing.assert_allclose(spectra.sum(axis=1), 1.0, atol=0.01)


@pytest.mark.parametrize("level", [344.5650, 0.1, -99.3353])
def test_equal_values_leave_nothing_in_doubt(level):
    """Whatever rounding makes of their mean, on one slice and on several."""
    for shape in ((12, 12), (3, 12, 12)):
        weights = np.random.default_rng(1).uniform(0.1, 1.0, shape)
        found = doubt_of_mean(np.full(shape, level), weights, (2.0, 0.5, 0.5)[-len(shape) :])
        assert found.variance_of_mean == 0.0
