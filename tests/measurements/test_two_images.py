"""What differs between two images, and how well it is known when they share their noise."""

from __future__ import annotations

import math

import numpy as np
import pytest

from ct_measure_plugin.measurements import find, measure
from ct_measure_plugin.measurements.two_images import difference_between, same_grid
from ct_measure_plugin.physics.regions import Disc
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.volume import Volume

NAME = "region_statistics"
SETTINGS = find(NAME).settings_type()
DISC = Disc((20.0, 20.0), 12.0, z_mm=0.0, name="water")


def difference(first, second, region=DISC):
    answers = tuple(measure(NAME, one, region) for one in (first, second))
    return difference_between((first, second), region, answers, SETTINGS), answers


def volume(seed, mean=40.0, share=None, **more):
    hu = np.random.default_rng(seed).normal(0, 10, (1, 80, 80))
    if share is not None:
        hu = hu + share
    return Volume(hu + mean, more.pop("spacing_mm", (1.0, 0.5, 0.5)), **more)


def test_the_difference_is_second_minus_first():
    found, (one, two) = difference(volume(1), volume(2, mean=55.0))
    for name in ("mean", "sd", "median", "minimum", "maximum"):
        assert getattr(found, name).value == getattr(two, name).value - getattr(one, name).value
        assert getattr(found, name).unit == "HU"


def test_two_scans_add_their_uncertainties():
    """White noise of 10 HU in either image: the pixelwise difference and the quadrature agree."""
    found, (one, two) = difference(volume(1), volume(2))
    apart = math.hypot(one.mean.uncertainty, two.mean.uncertainty)
    # each is known to about 1/sqrt(2 n), 1800 pixels: 2 %; both follow the same pixels
    assert found.mean.uncertainty == pytest.approx(apart, rel=0.1)
    assert found.sd.uncertainty == pytest.approx(math.hypot(one.sd.uncertainty, two.sd.uncertainty))


def test_shared_noise_is_allowed_for():
    """40 HU of noise that both images share, 10 HU that they do not: only the latter counts."""
    shared = np.random.default_rng(3).normal(0, 40, (1, 80, 80))
    found, (one, two) = difference(volume(1, share=shared), volume(2, share=shared))
    apart, _ = difference(volume(1), volume(2))
    assert found.mean.uncertainty == pytest.approx(apart.mean.uncertainty, rel=1e-6)
    assert found.mean.uncertainty < math.hypot(one.mean.uncertainty, two.mean.uncertainty) / 3


def test_other_grids_are_taken_as_independent():
    second = volume(2, spacing_mm=(1.0, 0.6, 0.6))
    assert not same_grid(volume(1), second)
    found, (one, two) = difference(volume(1), second)
    assert found.mean.uncertainty == math.hypot(one.mean.uncertainty, two.mean.uncertainty)
    assert "independent-images" in {caution.code for caution in found.cautions}


@pytest.mark.parametrize(
    "more", [{"origin_mm": (0.0, 0.01, 0.0)}, {"spacing_mm": (1.0, 0.5001, 0.5)}]
)
def test_a_grid_is_the_same_to_a_thousandth_of_a_voxel(more):
    assert same_grid(volume(1), volume(2))
    assert not same_grid(volume(1), volume(2, **more))


def test_what_was_not_measured_in_either_says_which():
    far = Disc((200.0, 20.0), 5.0, z_mm=0.0)
    found, _ = difference(volume(1), volume(2), far)
    assert isinstance(found, NotMeasured)
    assert found.reason.startswith("the first image: ")


def test_units_must_agree():
    found, _ = difference(volume(1), volume(2, unit="1/cm"))
    assert "different units, 'HU' and '1/cm'" in found.reason
