"""The standard error of a small region's mean against noise of known spectrum."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import fft
from test_noise_correlation import FILTERS, SIDE, covered

from ct_measure_plugin.physics.coverage import plane_coverage
from ct_measure_plugin.physics.noise_correlation import doubt_of_mean
from ct_measure_plugin.physics.regions import Disc

KINDS = ("white", "smooth", "smoother", "ramp with Hann")
STEP = 32  # between discs: the noise is shared over 6 px at most


def discs(kind: str, radius: float, fields: int, seed: int = 31):
    """Return means (their truth is 0), doubts and the true scatter of discs in noise of a kind."""
    cover = plane_coverage(Disc((16.3, 15.8), radius), (STEP, STEP), spacing_mm=(1, 1))
    rng = np.random.default_rng(seed)
    means, doubts = [], []
    for _ in range(fields):
        white = rng.standard_normal((SIDE, SIDE))
        field = fft.irfft2(fft.rfft2(white) * FILTERS[kind], (SIDE, SIDE))
        for i in range(0, SIDE, STEP):
            for j in range(0, SIDE, STEP):
                patch = field[i : i + STEP, j : j + STEP][cover.rows, cover.columns]
                means.append(float(np.sum(patch * cover.weights) / cover.weights.sum()))
                doubts.append(doubt_of_mean(patch, cover.weights, (1.0, 1.0)))
    rho = fft.irfft2(FILTERS[kind] ** 2, (SIDE, SIDE))
    pairs = fft.irfft2(np.abs(fft.rfft2(cover.weights, (SIDE, SIDE))) ** 2, (SIDE, SIDE))
    return np.array(means), doubts, math.sqrt(float(np.sum(rho * pairs))) / cover.weights.sum()


def stated(doubts: list) -> float:
    """Return the median standard error."""
    return math.sqrt(float(np.median([doubt.variance_of_mean for doubt in doubts])))


@pytest.mark.parametrize("radius", [2.0, 3.0, 5.0])
@pytest.mark.parametrize("kind", KINDS)
def test_small_discs_state_a_fair_standard_error(kind, radius):
    """Independent pixels would be covered 24 % of the time on the smoother noise at 2 px, and a
    periodogram of so few states up to 3.3 times the scatter of the ramp's."""
    means, doubts, truth = discs(kind, radius, fields=6)
    # found over 640 to 770 discs: 89.2 % (smoother noise, 3 px) to 98.9 % (ramp, 2 px); 384 discs
    # fix the share to 1.6 % and 0.5 %, and two such steps are let pass
    assert 0.86 <= covered(means, doubts) <= 0.999
    assert 0.8 <= stated(doubts) / truth <= 1.6


@pytest.mark.parametrize("kind", KINDS)
def test_growing_a_disc_makes_no_jump(kind):
    """From 1.8 to 6.4 px: 10 to 129 pixels, over every change of method."""
    radii = np.array([1.8, 2.15, 2.35, 2.9, 3.6, 4.4, 5.3, 6.4])
    errors = np.array([stated(discs(kind, radius, fields=1)[1]) for radius in radii])
    ratio = errors[1:] / errors[:-1]
    # for independent pixels the error falls as the radius rises, at most by 1.3 here
    assert ratio.max() < 1.5
    assert ratio.min() > 1 / 1.5


def test_a_narrow_label_does_not_drown():
    """2 × 10 px of white noise: the truth is SD/√20."""
    rng = np.random.default_rng(32)
    doubts = [doubt_of_mean(x, np.ones((2, 10)), (1, 1)) for x in rng.normal(0, 5.4, (60, 2, 10))]
    assert stated(doubts) == pytest.approx(5.4 / math.sqrt(20), rel=0.25)


def test_two_pixels_stay_bounded():
    """One difference knows next to nothing: Student's 12.7 for one degree of freedom bounds it."""
    values = np.array([[1.0, 3.0]])
    error = math.sqrt(doubt_of_mean(values, np.ones((1, 2)), (1.0, 1.0)).variance_of_mean)
    spread = float(values.std(ddof=1))
    assert spread / math.sqrt(2) < error < 40 * spread
