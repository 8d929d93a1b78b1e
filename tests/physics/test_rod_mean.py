"""The reading of one rod: its mean, and whether middle and border agree."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.physics.coverage import plane_coverage
from ct_measure_plugin.physics.region_statistics import region_statistics
from ct_measure_plugin.physics.regions import Disc
from ct_measure_plugin.physics.rod_mean import rod_mean

SPACING = (0.5, 0.5)


def disc(radius: float, shape: int = 41) -> np.ndarray:
    middle = 0.25 * (shape - 1)
    cover = plane_coverage(
        Disc((middle, middle), radius), (shape, shape), spacing_mm=SPACING, origin_mm=(0.0, 0.0)
    )
    found = np.zeros((shape, shape))
    found[cover.rows, cover.columns] = cover.weights
    return found


def test_the_mean_is_that_of_region_statistics():
    """The same definition and standard error, by the measurement that is there for it."""
    image = 100 + np.random.default_rng(1).normal(0, 10, (41, 41))
    weights = disc(6.0)
    slow = region_statistics(image, weights, spacing_mm=SPACING).mean
    found = rod_mean(image, weights, spacing_mm=SPACING).mean
    assert (found.value, found.uncertainty) == (slow.value, slow.uncertainty)


@pytest.mark.parametrize("slices", [1, 3])
def test_noise_alone_is_even(slices):
    """5 sigma: none of 60 may be called uneven."""
    rng = np.random.default_rng(2)
    weights = np.repeat(disc(5.0)[None], slices, axis=0)
    spacing = (2.0, *SPACING)
    found = [
        rod_mean(rng.normal(0, 20, weights.shape), weights, spacing_mm=spacing).uneven
        for _ in range(60)
    ]
    assert not any(found)


def test_a_border_in_the_region_is_uneven():
    """A rod of 5 mm radius and +300 HU, blurred by 1 mm, read with its border included."""
    y, x = np.mgrid[-20:21, -20:21] * 0.5
    image = 300 / (1 + np.exp((np.hypot(y, x) - 5.0) / 0.5)) + np.random.default_rng(3).normal(
        0, 5, (41, 41)
    )
    whole, well_inside = (rod_mean(image, disc(r), spacing_mm=SPACING) for r in (5.0, 3.0))
    assert whole.uneven
    assert whole.step.value < -50
    assert not well_inside.uneven


def test_a_region_too_small_has_no_parts():
    found = rod_mean(np.ones((41, 41)), disc(1.0), spacing_mm=SPACING)
    assert found.step is None
    assert not found.uneven
