"""The standard error of a region's mean against noise of known spectrum, size by size."""

from __future__ import annotations

import math

import numpy as np
import pytest
from noise_discs import BESIDE, FILTERS, discs
from scipy import linalg

from ct_measure_plugin.physics.noise_blocks import (
    REACH,
    block_correlation,
    log_prior,
    pixel_correlation,
)
from ct_measure_plugin.physics.noise_correlation import doubt_of_mean
from ct_measure_plugin.physics.small_regions import doubt_of_few

RADII = (2.0, 3.0, 5.0, 8.0, 12.0, 16.0, 25.0)

#: Radius below which discs of ramp noise are covered more than 97 % of the time, as the docs page
#: says: so few pixels do not show that its low frequencies are missing.
WIDE_BELOW = 6.0


@pytest.mark.parametrize("radius", [2.0, 3.0, 5.0, 8.0, 12.0])
@pytest.mark.parametrize("kind", FILTERS)
def test_discs_state_a_fair_standard_error(kind, radius):
    """Nominal 95 % hold the truth 93 to 97 % of the time, and the error is near the true one.

    Independent pixels would be covered 24 % of the time on the smoother noise at 2 px.
    """
    found = discs(kind, radius, count=192, seed=31)
    # averaged over the known distribution of the mean, 192 discs fix the share to 0.3 to 0.7 %;
    # below 8 px the interval is widest where the mean is farthest off, which the average does not
    # see: up to 2 % more are held than it says (the test below)
    low, high = (0.93, 0.97) if radius >= 8 else (0.90, 0.98 if radius > 3 else 0.99)
    assert low <= found.expected() <= high
    assert 0.93 <= found.ratio() <= (1.2 if radius >= 8 else 1.6)


@pytest.mark.parametrize("kind", BESIDE)
def test_noise_beside_the_usual_is_covered_too(kind):
    """From 8 px on; the error is up to 1.5 times too large, as the docs page says."""
    found = discs(kind, 8.0, count=192, seed=31)
    assert found.expected() >= 0.93
    assert 0.93 <= found.ratio() <= 1.5


@pytest.mark.long
@pytest.mark.parametrize("radius", RADII)
@pytest.mark.parametrize("kind", FILTERS)
def test_the_interval_holds_the_truth_as_often_as_it_says(kind, radius):
    """The table of the docs page."""
    found = discs(kind, radius, count=3000, seed=2026)
    # 3,000 discs fix the share to 0.4 %: two such steps beyond 93 to 97 %
    assert 0.922 <= found.covered() <= (0.995 if radius < WIDE_BELOW else 0.978)


@pytest.mark.parametrize("kind", FILTERS)
def test_growing_a_disc_makes_no_jump(kind):
    """From 2.2 to 29 px: over every size of blocks and into the periodogram."""
    radii = np.array([*np.geomspace(2.2, 12, 10), 25.0, 27.0, 29.0])
    cells = [discs(kind, radius, 48 if radius < 9 else 24, seed=31) for radius in radii]
    errors = np.array([math.exp(np.mean(np.log(cell.errors))) for cell in cells])
    ratio = errors[1:] / errors[:-1]
    # for independent pixels the error falls by 1.21 a step, and by 1.08 in the last two; the first
    # steps leave doubt about the spectrum behind, which falls faster
    assert ratio[:9].max() < 1.2
    assert ratio[:9].min() > 1 / 1.6
    assert 1 / 1.25 < ratio[10:].min() <= ratio[10:].max() < 1.05


def test_a_narrow_label_does_not_drown():
    """2 × 10 px of white noise: the truth is SD/√20, which doubt about the spectrum widens."""
    rng = np.random.default_rng(32)
    doubts = [doubt_of_mean(x, np.ones((2, 10)), (1, 1)) for x in rng.normal(0, 5.4, (60, 2, 10))]
    stated = math.sqrt(float(np.median([doubt.variance_of_mean for doubt in doubts])))
    # Student's factor for a third of 19 degrees of freedom is 1.25; spectra that 20 pixels cannot
    # rule out may add as much again
    assert 0.9 < stated / (5.4 / math.sqrt(20)) < 1.25**2


def test_two_pixels_stay_bounded():
    """One difference knows next to nothing: Student's 12.7 for one degree of freedom bounds it."""
    values = np.array([[1.0, 3.0]])
    error = math.sqrt(doubt_of_mean(values, np.ones((1, 2)), (1.0, 1.0)).variance_of_mean)
    spread = float(values.std(ddof=1))
    assert spread / math.sqrt(2) < error < 40 * spread


@pytest.mark.parametrize("shape", [(1, 400), (400, 1), (2, 300)])
def test_strips_without_room_for_blocks_have_an_answer(shape):
    """Lines of white noise: the truth is SD/√n; the periodogram of a line knows it to a third."""
    rng = np.random.default_rng(33)
    doubts = [doubt_of_mean(x, np.ones(shape), (1.0, 1.0)) for x in rng.normal(0, 5, (30, *shape))]
    stated = math.sqrt(float(np.median([doubt.variance_of_mean for doubt in doubts])))
    assert stated == pytest.approx(5 / math.sqrt(np.prod(shape)), rel=0.35)


def test_a_diagonal_line_is_too_narrow_for_blocks():
    residual = np.eye(200)[None]
    assert doubt_of_few(residual, residual, (1.0, 1.0), (1.0, 1.0)) is None


@pytest.mark.parametrize("stretch", [(1.0, 1.0), (1.0, 2.5)])
def test_correlations_belong_to_spectra(stretch):
    """Every spectrum makes a covariance matrix without a negative eigenvalue, of variance 1."""
    found = pixel_correlation(stretch)
    np.testing.assert_allclose(found[:, 0, 0], 1.0, rtol=1e-12)
    for table in found[:, :7, :7]:
        row, column = np.divmod(np.arange(49), 7)
        matrix = table[
            np.abs(np.subtract.outer(row, row)), np.abs(np.subtract.outer(column, column))
        ]
        assert linalg.eigvalsh(matrix)[0] > -1e-9
    assert np.exp(log_prior()).sum() == pytest.approx(1.0)


def test_a_gaussian_spectrum_has_a_gaussian_correlation():
    """exp(-(s f)²) belongs to exp(-(π r/s)²); s = 4.4 px is resolved to 1 part in 100."""
    lengths = np.geomspace(1.5, 16.0, 20)  # the level spectra come first, after white noise
    i = int(np.argmin(np.abs(lengths - 4.4)))
    r = np.arange(10.0)
    closed = np.exp(-((np.pi * r / lengths[i]) ** 2))
    np.testing.assert_allclose(pixel_correlation((1.0, 1.0))[1 + i, :10, 0], closed, atol=0.01)


@pytest.mark.parametrize("block", [(1, 1), (1, 2), (2, 3), (4, 5)])
def test_blocks_covary_as_their_pixels_do(block):
    """The slow way: the mean over all pairs of pixels of two blocks."""
    pixels = pixel_correlation((1.0, 1.0))
    table = block_correlation((1.0, 1.0), block)
    rows, columns = np.arange(block[0]), np.arange(block[1])
    for down, right in ((0, 0), (1, 0), (0, 2), (2, 1)):
        y = np.abs(np.subtract.outer(rows, rows + down * block[0]))
        x = np.abs(np.subtract.outer(columns, columns + right * block[1]))
        slow = pixels[:, y[:, :, None, None], x[None, None]].mean(axis=(1, 2, 3, 4))
        np.testing.assert_allclose(table[:, down, right], slow, atol=1e-12)
    assert table.shape[1] - 1 <= REACH // block[0]
    assert not table[:, -1].any()


@pytest.mark.parametrize("radius", [3.0, 6.5, 12.0])
def test_turns_and_mirrors_change_nothing(radius):
    """Blocks of 1 × 3 pixels among them; to rounding."""
    rng = np.random.default_rng(34)
    y, x = np.mgrid[-14:15, -14:15]
    cover = ((y / radius) ** 2 + (x / (0.8 * radius)) ** 2 < 1).astype(float)
    noise = rng.normal(0, 10, cover.shape)
    plain = doubt_of_mean(noise, cover, (0.5, 0.7)).variance_of_mean
    for a, b, steps in (
        (noise[::-1], cover[::-1], (0.5, 0.7)),
        (noise[:, ::-1], cover[:, ::-1], (0.5, 0.7)),
        (np.rot90(noise), np.rot90(cover), (0.7, 0.5)),
        (noise.T, cover.T, (0.7, 0.5)),
    ):
        assert doubt_of_mean(a, b, steps).variance_of_mean == pytest.approx(plain, rel=1e-9)
