"""The standard error of a mean against ensembles of noise whose spectrum is known."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import fft, special, stats

from ct_measure_plugin.physics.coverage import plane_coverage
from ct_measure_plugin.physics.noise_correlation import doubt_of_mean, independent_doubt
from ct_measure_plugin.physics.noise_spectra import library
from ct_measure_plugin.physics.regions import Disc

SIDE = 256  # of a field, cut into 16 patches of 64 × 64
FREQUENCY = np.hypot(*np.meshgrid(fft.fftfreq(SIDE), fft.rfftfreq(SIDE), indexing="ij"))
HANN = np.where(FREQUENCY < 0.5, 0.5 + 0.5 * np.cos(2 * np.pi * FREQUENCY), 0)
#: Amplitude filters. The ramp's power |f| is that of filtered backprojection (Riederer, Pelc and
#: Chesler 1978); with the Hann window it is no member of the library of spectra.
FILTERS = {
    "white": np.ones_like(FREQUENCY),
    "smooth": np.exp(-2 * (np.pi * 1.0 * FREQUENCY) ** 2),  # Gaussian of 1 px
    "smoother": np.exp(-2 * (np.pi * 1.5 * FREQUENCY) ** 2),
    "ramp": np.sqrt(FREQUENCY) * np.exp(-((3 * FREQUENCY) ** 2) / 2),
    "ramp with Hann": np.sqrt(FREQUENCY) * HANN,
}


def ensemble(kind: str, radius: float, fields: int, seed: int) -> tuple[np.ndarray, list]:
    """Return means (their truth is 0) and doubts of discs in noise of a kind."""
    cover = plane_coverage(Disc((32.3, 31.8), radius), (64, 64), spacing_mm=(1, 1))
    rng = np.random.default_rng(seed)
    means, doubts = [], []
    for _ in range(fields):
        white = rng.standard_normal((SIDE, SIDE))
        field = fft.irfft2(fft.rfft2(white) * FILTERS[kind], (SIDE, SIDE))
        for i in range(0, SIDE, 64):
            for j in range(0, SIDE, 64):
                patch = field[i : i + 64, j : j + 64][cover.rows, cover.columns]
                means.append(float(np.sum(patch * cover.weights) / cover.weights.sum()))
                doubts.append(doubt_of_mean(patch, cover.weights, (1.0, 1.0)))
    return np.array(means), doubts


def covered(means: np.ndarray, doubts: list) -> float:
    """Return how often ±1.96 standard errors hold the truth."""
    errors = np.sqrt([doubt.variance_of_mean for doubt in doubts])
    return float(np.mean(np.abs(means) <= 1.96 * errors))


@pytest.mark.parametrize("kind", FILTERS)
def test_the_standard_error_covers_the_truth(kind):
    """Nominal 95 % hold the truth 93 to 97 % of the time in a disc of 25 px radius."""
    means, doubts = ensemble(kind, 25.0, fields=80, seed=20)
    # 1,280 discs fix the share to 0.6 %
    assert 0.93 <= covered(means, doubts) <= 0.97


@pytest.mark.parametrize(
    ("kind", "low", "high"),
    [("white", 0.93, 0.97), ("smooth", 0.92, 0.97), ("smoother", 0.90, 0.97), ("ramp", 0.95, 1.0)],
)
def test_small_regions_stay_near_it_or_on_the_safe_side(kind, low, high):
    """A disc of 14 px holds 47 independent samples of the smoother noise and 530 of the ramp's,
    too few to tell whether a ramp's spectrum goes on down to zero: the interval stays wide."""
    means, doubts = ensemble(kind, 14.0, fields=60, seed=21)
    assert low <= covered(means, doubts) <= high  # 960 discs fix the share to 0.7 %


@pytest.mark.parametrize("kind", FILTERS)
def test_the_independent_samples_are_those_of_the_spectrum(kind):
    """W² / Σ rho² R, computed from the known filter."""
    cover = plane_coverage(Disc((32.3, 31.8), 20.0), (64, 64), spacing_mm=(1, 1)).weights
    rho = fft.irfft2(FILTERS[kind] ** 2, (SIDE, SIDE))
    pairs = fft.irfft2(np.abs(fft.rfft2(cover, (SIDE, SIDE))) ** 2, (SIDE, SIDE))
    truth = cover.sum() ** 2 / np.sum((rho / rho[0, 0]) ** 2 * pairs)
    _, doubts = ensemble(kind, 20.0, fields=6, seed=22)
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
    for _ in range(20):
        field = fft.irfft2(fft.rfft2(rng.normal(0, 10, (SIDE, SIDE))) * FILTERS["smooth"])
        for i in range(0, SIDE, 64):
            for j in range(0, SIDE, 64):
                patch = field[i : i + 64, j : j + 64][cover.rows, cover.columns]
                stated.append(doubt_of_mean(patch, cover.weights, (0.5, 0.5)).variance_of_mean)
    # single estimates scatter by 12 % of the variance; Student's factor adds a percent or two
    assert math.sqrt(np.median(stated)) == pytest.approx(truth, rel=0.04)


@pytest.mark.parametrize("kind", ["smooth", "ramp"])
def test_the_naive_standard_error_would_be_wrong(kind):
    """Smooth noise makes s/sqrt(n) too small, ramp-filtered noise makes it too large."""
    means, doubts = ensemble(kind, 20.0, fields=12, seed=3)
    cover = plane_coverage(Disc((32.3, 31.8), 20.0), (64, 64), spacing_mm=(1, 1)).weights
    sd = math.sqrt(float(np.mean(FILTERS[kind] ** 2)))
    naive = sd / math.sqrt(cover.sum())
    true, stated = np.std(means), math.sqrt(np.median([d.variance_of_mean for d in doubts]))
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
