"""The MTF of a round edge against discs blurred exactly, by Hankel transform."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from scipy.spatial import cKDTree
from truth_images import EDGE, GAUSS, HANN, KERNELS, Kernel, disc_image, noise

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics import disc_mtf
from ct_measure_plugin.physics.results import NotMeasured, Quantity

SPACING = (0.5, 0.5)


def percent(found, kernel, level=0.5):
    name = {0.5: "f50", 0.1: "f10"}[level]
    return 100 * (getattr(found, name).value / kernel.level(level) - 1)


@cache
def disc(kernel: Kernel, radius: float, pixel: float, center=(0.11, -0.07)) -> np.ndarray:
    size = int(2 * (radius + 8) / pixel)
    image = disc_image(
        kernel, radius, shape=(size, size), spacing=(pixel, pixel), center=center, low=40.0
    )
    image.setflags(write=False)
    return image


@pytest.mark.parametrize("method", ["fitted", "conventional"])
@pytest.mark.parametrize("kernel", KERNELS, ids=lambda k: k.name)
@pytest.mark.parametrize(("radius", "pixel"), [(12.5, 0.3), (12.5, 0.7), (6.0, 0.5), (4.0, 0.3)])
def test_without_noise_the_bias_is_below_half_a_percent(kernel, method, radius, pixel):
    found = disc_mtf(disc(kernel, radius, pixel), spacing_mm=(pixel, pixel), method=method)
    assert found, found
    assert abs(percent(found, kernel)) < 0.5
    assert abs(percent(found, kernel, 0.1)) < 0.5
    # sigma² / 2R alone would be 4 µm off at 12.5 mm with the enhancing kernel, 12 µm at 4 mm
    # (third order: 0.3 mm cubed over 4 mm squared is 2 µm)
    assert found.radius.value == pytest.approx(radius, abs=0.0015 if radius > 5 else 0.004)


@pytest.mark.parametrize("ratio", [5.3, 7.0, 10.5])
def test_the_curvature_of_a_small_rod_is_taken_out(ratio):
    """Without it f50 of a Gaussian reads low by (σ/R)²/4: 0.9, 0.5 and 0.2 %."""
    found = disc_mtf(disc(GAUSS, 0.6 * ratio, 0.5), spacing_mm=SPACING)
    assert abs(percent(found, GAUSS)) < 0.12
    assert abs(percent(found, GAUSS, 0.1)) < 0.12
    assert ("small-radius" in {c.code for c in found.cautions}) == (ratio < 10)


@pytest.mark.parametrize("center", [(0.0, 0.0), (0.25, 0.25), (0.13, -0.41), (-2.2, 1.7)])
def test_the_centre_is_found_within_the_pixel(center):
    found = disc_mtf(disc(HANN, 6.0, 0.5, center), spacing_mm=SPACING)
    middle = (int(2 * 14 / 0.5) - 1) / 2 * 0.5
    assert found.center_mm[0] == pytest.approx(middle + center[0], abs=2e-3)
    assert found.center_mm[1] == pytest.approx(middle + center[1], abs=2e-3)


def test_a_wrong_centre_would_cost_a_bessel_factor():
    """Pixels placed about a centre wrong by δ read MTF · J0(2πfδ) (0.96 at 0.3 mm⁻¹, δ 0.2 mm)."""
    from scipy.special import j0

    from ct_measure_plugin.physics.edge_bins import bin_by_distance
    from ct_measure_plugin.physics.mtf_curve import conventional_mtf

    image = disc(GAUSS, 12.5, 0.5)
    n = image.shape[0]
    y, x = np.mgrid[:n, :n] * 0.5 - (n - 1) / 4
    f = np.linspace(0, 0.6, 61)
    curves = []
    for delta in (0.0, 0.2):
        d = 12.5 - np.hypot(y - 0.11 - delta, x + 0.07)
        bins = bin_by_distance(d.ravel(), image.ravel(), 0.05, half=7.5)
        middles, esf = bins.evenly(7.4)
        n_bins = len(middles)
        zero = np.zeros((n_bins, n_bins))
        curves.append(conventional_mtf(middles, esf, zero, half=7.0, frequency=f).mtf)
    ratio = curves[1] / curves[0]
    # to first order in δ / R; two windows on slightly different tails leave half a percent
    np.testing.assert_allclose(ratio[10:31:20], j0(2 * np.pi * f[10:31:20] * 0.2), atol=0.005)


@pytest.mark.parametrize("method", ["fitted", "conventional"])
def test_sign_of_contrast_and_mirroring_do_not_matter(method):
    rng = np.random.default_rng(4)
    image = disc(HANN, 6.0, 0.5) + noise(rng, (56, 56), SPACING, 3, HANN)
    first = disc_mtf(image, spacing_mm=SPACING, method=method)
    for other, sign in ((-image, -1), (image[:, ::-1], 1), (image.T, 1), (500 - image[::-1], -1)):
        found = disc_mtf(other, spacing_mm=SPACING, method=method)
        assert found.f50.value == pytest.approx(first.f50.value, rel=1e-6)
        assert found.contrast.value == pytest.approx(sign * first.contrast.value, rel=1e-6)
        assert found.width.value == pytest.approx(first.width.value, rel=1e-6)
        assert found.overshoot.value == pytest.approx(first.overshoot.value, rel=1e-4, abs=1e-6)


def test_sectors_tell_directions_apart():
    """A Gaussian twice as wide across as along, of a disc: each sector reads its own side.

    The edge of a large disc across direction φ has the variance a² cos² φ + b² sin² φ; over
    sectors of ±10° that is the mean within 1.5 %.
    """
    from scipy import ndimage

    fine = 5
    n = 96 * fine
    y, x = (np.mgrid[:n, :n] - (n - 1) / 2) * 0.1
    sharp = 100.0 * (np.hypot(y, x) < 16.0)
    sharp = ndimage.gaussian_filter(sharp, (0.45 / 0.1, 0.9 / 0.1))
    image = sharp[2::fine, 2::fine]
    for angle, sigma in ((0.0, 0.9), (90.0, 0.45), (-90.0, 0.45), (180.0, 0.9)):
        found = disc_mtf(image, spacing_mm=SPACING, sector_deg=(angle, 10.0))
        # ±10° mixes in sin²: the mean of sin² φ over the sector is 0.010
        variance = sigma**2 + 0.010 * ((0.45**2 + 0.9**2) - 2 * sigma**2)
        # a rasterised disc of 0.1 mm steps and the ellipse of the blurred outline: 2 %
        assert found.f50.value == pytest.approx(0.187391 / np.sqrt(variance), rel=0.02)


def leaning(kernel, count, step, sd, seed=3, coloured=True):
    """A stack whose centre moves by `step` mm a slice, with noise."""
    rng = np.random.default_rng(seed)
    offsets = (np.arange(count) - (count - 1) / 2)[:, None] * np.array(step)
    planes = [
        disc(kernel, 6.0, 0.5, (0.11 + round(float(a), 6), -0.07 + round(float(b), 6)))
        for a, b in offsets
    ]
    colour = kernel if coloured else None
    return np.stack([p + noise(rng, p.shape, SPACING, sd, colour) for p in planes])


@pytest.mark.parametrize("step", [(0.03, -0.02), (0.2, 0.1)])
def test_a_leaning_rod_is_pooled_along_its_axis(step):
    stack = leaning(HANN, 8, step, 0.0)
    found = disc_mtf(stack, spacing_mm=SPACING, slice_gap_mm=2.0)
    assert abs(percent(found, HANN)) < 0.5
    truth = np.degrees(np.arctan(np.hypot(*step) / 2.0))
    assert found.lean.value == pytest.approx(truth, abs=0.01)
    assert ("leaning-object" in {c.code for c in found.cautions}) == (truth > 2)
    middle = (int(2 * 14 / 0.5) - 1) / 2 * 0.5
    assert found.center_mm == pytest.approx((middle + 0.11, middle - 0.07), abs=3e-3)


@pytest.mark.parametrize("coloured", [False, True], ids=["white", "coloured"])
def test_a_low_contrast_is_measured_honestly_from_many_slices(coloured):
    """Contrast equal to the noise, 16 slices: the centre of no single slice is trustworthy."""
    f50 = []
    for seed in range(6):
        stack = leaning(HANN, 16, (0.03, -0.02), 100.0, seed, coloured)
        found = disc_mtf(stack, spacing_mm=SPACING, slice_gap_mm=2.0)
        assert "low-contrast" in {c.code for c in found.cautions}
        f50.append((found.f50.value, found.f50.uncertainty))
        assert abs(found.radius.value - 6.0) < 3.5 * found.radius.uncertainty
    value, doubt = np.array(f50).T
    # 6 repeats: their mean within 3.5 of its standard errors, none beyond 3.5 of its own
    assert abs(value.mean() - 0.4) < 3.5 * np.sqrt(np.mean(doubt**2) / 6)
    assert np.all(np.abs(value - 0.4) < 3.5 * doubt)
    assert np.all(doubt > 0.01)


@pytest.mark.parametrize(("seed", "tilt"), [(1, 0.0), (6, 0.0), (6, 0.35)])
def test_a_faint_rod_is_said_to_lean_only_if_it_does(seed, tilt):
    """Contrast twice the noise on four slices: the lean is known to a degree, and 2° mean nothing;
    0.35 mm a slice of 2 mm are 9.9°."""
    stack = leaning(HANN, 4, (tilt, 0.0), 50.0, seed)
    found = disc_mtf(stack, spacing_mm=SPACING, slice_gap_mm=2.0)
    assert found.lean.uncertainty > 0.4
    assert ("leaning-object" in {c.code for c in found.cautions}) == (tilt > 0)


@pytest.mark.parametrize("kernel", [HANN, EDGE], ids=lambda k: k.name)
def test_the_excess_of_a_discs_edge_is_the_difference_of_the_two_transforms(kernel):
    """Hankel transform of the disc less the straight edge, about the least-squares place."""
    from truth_images import disc_profile, edge_response

    from ct_measure_plugin.physics.disc_curvature import curvature_of
    from ct_measure_plugin.physics.edge_line import RoughEsf

    radius, d = 6.0, np.linspace(-5.5, 5.5, 2201)
    line = np.gradient(edge_response(kernel, d), d)
    bent = curvature_of(RoughEsf(0.4, d, 0 * d, line), radius)
    inner = d[np.abs(d) < 2.0]
    disc_edge = disc_profile(kernel, radius, radius - inner - bent.shift)
    excess = disc_edge - edge_response(kernel, inner)
    # third order: (sigma / R)³ of some tenths
    np.testing.assert_allclose(bent.at(inner), excess, atol=4e-4)
    assert np.abs(excess).max() > 8e-4  # so that the check can fail


def test_a_single_slice_of_such_contrast_is_refused():
    found = disc_mtf(leaning(HANN, 1, (0, 0), 100.0)[0], spacing_mm=SPACING)
    assert isinstance(found, NotMeasured)


@pytest.mark.parametrize("coloured", [False, True], ids=["white", "coloured"])
def test_stated_uncertainties_are_the_scatter_of_repeats(coloured):
    """CNR 10, 40 repeats fix a scatter to 11 %: three of these are 0.67 to 1.33."""
    rng = np.random.default_rng(8)
    names = ("f50", "radius", "contrast", "noise")
    clean = disc(HANN, 6.0, 0.5)
    rows = []
    for _ in range(40):
        image = clean + noise(rng, clean.shape, SPACING, 10, HANN if coloured else None)
        found = disc_mtf(image, spacing_mm=SPACING)
        rows.append([(getattr(found, n).value, getattr(found, n).uncertainty) for n in names])
    rows = np.array(rows)
    ratio = np.median(rows[..., 1], axis=0) / rows[..., 0].std(axis=0, ddof=1)
    assert np.all(ratio > 0.67), dict(zip(names, ratio, strict=True))
    assert np.all(ratio < 1.34), dict(zip(names, ratio, strict=True))


def two_rods():
    image = disc(GAUSS, 6.0, 0.5) + 0
    return image + 60 * (np.hypot(*(np.mgrid[:56, :56] - np.array([27, 49])[:, None, None])) < 4)


def oval(stretch=1.1, radius=8.0):
    """An ellipse with the semi-axes R s and R / s behind a Gaussian edge, placed by distance."""
    from scipy.special import ndtr

    y, x = np.mgrid[-40:41, -40:41] * 0.5
    t = np.linspace(0, 2 * np.pi, 4001)
    outline = np.stack([radius / stretch * np.sin(t), radius * stretch * np.cos(t)], axis=1)
    distance, _ = cKDTree(outline).query(np.stack([y.ravel(), x.ravel()], axis=1))
    inside = np.hypot(stretch * y, x / stretch) < radius
    return 100 * ndtr(np.where(inside, 1, -1) * distance.reshape(y.shape) / 0.6)


@pytest.mark.parametrize("stretch", [1.01, 1.04])
def test_a_slightly_oval_rod_is_followed(stretch):
    """Placed by a circle, the distances would spread by R (s - 1)/√2: f50 -0.4 and -6.6 %."""
    found = disc_mtf(oval(stretch), spacing_mm=SPACING)
    assert abs(percent(found, GAUSS)) < 0.5
    assert found.roundness.value == pytest.approx(8 * (stretch - 1 / stretch) / 2, rel=0.05)


def told(image):
    return {c.code for c in disc_mtf(image, spacing_mm=SPACING).cautions}


def noisy(sd=1.0):
    """A rod of contrast 100 in noise of a hundredth, of which nothing is to be said."""
    return disc(HANN, 6.0, 0.5) + np.random.default_rng(5).normal(0, sd, (56, 56))


def test_what_a_reader_must_know_is_told_and_nothing_else():
    y, x = (np.mgrid[:56, :56] - 27.5) * 0.5
    assert told(noisy()) == set()
    assert told(noisy() + 0.5 * x) == {"background-gradient"}  # 6 % of the contrast across the rod
    blob = 9.0 * ((np.abs(y - 8.5) < 1.6) & (np.abs(x) < 5.0))
    assert "another-object" in told(noisy() + blob)
    assert told(noisy()[9:-9, 9:-9]) == {"tail-truncation"}  # 3.5 mm, three FWHM, of surroundings
    assert "low-contrast" in told(noisy(sd=15.0))
    coarse = disc(EDGE, 12.5, 0.7) + np.random.default_rng(5).normal(0, 0.5, (58, 58))
    found = disc_mtf(coarse, spacing_mm=(0.7, 0.7))
    assert "aliasing" in {c.code for c in found.cautions}  # its MTF is 0.6 at 0.71 mm⁻¹


def test_a_level_within_the_noise_is_not_given():
    found = disc_mtf(noisy(sd=20.0), spacing_mm=SPACING)
    assert isinstance(found.f2, NotMeasured)
    assert "noise" in found.f2.reason
    assert "noise-floor" in {c.code for c in found.cautions}


REFUSALS = {
    "all pixels": lambda: np.zeros((40, 40)),
    "not round": oval,
    "something else": two_rods,
    "reaches the border": lambda: disc(GAUSS, 6.0, 0.5)[16:40, 16:40],
    "less than 5 sigma": lambda: disc(GAUSS, 2.4, 0.5),
    "even material": lambda: disc(GAUSS, 6.0, 0.5)[12:-12, 12:-12],
    "contrast is too low": lambda: noisy(sd=170.0),
    "clipped": lambda: np.minimum(
        np.rint(10 * disc(GAUSS, 6.0, 0.5) + np.random.default_rng(1).normal(0, 20, (56, 56))),
        1390,
    ),
}


@pytest.mark.parametrize("words", REFUSALS)
def test_what_cannot_be_measured_is_refused_in_words(words):
    found = disc_mtf(REFUSALS[words](), spacing_mm=SPACING)
    assert isinstance(found, NotMeasured)
    assert words in found.reason
    assert found.remedy


@pytest.mark.parametrize("seed", range(6))
def test_noise_is_not_taken_for_an_odd_shape(seed):
    """Contrast half the noise, on one slice: the fit finds ovals and blurs of all kinds."""
    image = disc(GAUSS, 6.0, 0.5) + np.random.default_rng(seed).normal(0, 200, (56, 56))
    found = disc_mtf(image, spacing_mm=SPACING)
    assert isinstance(found, NotMeasured)
    assert "not round" not in found.reason
    assert "sigma" not in found.reason


def test_samples_too_far_apart_are_refused():
    """The edge within 4° of one direction, on pixels of 0.7 mm: some twenty samples."""
    image = disc_image(EDGE, 6.0, shape=(40, 40), spacing=(0.7, 0.7), low=40.0)
    found = disc_mtf(image, spacing_mm=(0.7, 0.7), sector_deg=(0.0, 4.0))
    assert isinstance(found, NotMeasured)
    assert "samples across the edge lie up to" in found.reason


def test_a_slice_without_the_rod_is_refused():
    stack = np.stack([disc(GAUSS, 6.0, 0.5)] * 4 + [np.full((56, 56), 40.0)])
    found = disc_mtf(stack, spacing_mm=SPACING)
    assert isinstance(found, NotMeasured)
    assert "do not hold the same rod" in found.reason


def test_misuse_is_named():
    with pytest.raises(ArgumentError, match="'method' must be"):
        disc_mtf(disc(GAUSS, 6.0, 0.5), spacing_mm=SPACING, method="best")
    with pytest.raises(ArgumentError, match="'sector_deg' must"):
        disc_mtf(disc(GAUSS, 6.0, 0.5), spacing_mm=SPACING, sector_deg=(0.0, 120.0))
    with pytest.raises(ArgumentError, match="'image' must be"):
        disc_mtf(np.zeros((4, 4)), spacing_mm=SPACING)


def test_further_levels_are_given():
    found = disc_mtf(disc(EDGE, 12.5, 0.5), spacing_mm=SPACING, levels=(0.2,))
    assert found.levels.y[0] == pytest.approx(EDGE.level(0.2), rel=5e-3)
    assert isinstance(found.at_level(0.3), Quantity)
