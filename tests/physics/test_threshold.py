"""The part of a region within a range of values, against the arrays themselves."""

from __future__ import annotations

import math

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.measurements import measure
from ct_measure_plugin.physics.regions import Box, Disc
from ct_measure_plugin.physics.threshold import threshold_mask
from ct_measure_plugin.physics.volume import Volume


@pytest.fixture
def volume():
    hu = np.round(np.random.default_rng(4).normal(40, 60, (6, 40, 50))).astype(np.int16)
    return Volume(hu, (2.0, 0.5, 0.7), origin_mm=(-3.0, 5.0, -7.0))


@pytest.mark.parametrize(("first", "last"), [(2, 2), (1, 4)])
def test_the_pixels_are_those_inside_and_in_range(volume, first, last):
    z = (float(volume.positions_mm[first]), float(volume.positions_mm[last]))
    disc = Disc((14.0, 8.0), 6.0, z_mm=z, name="insert")
    found = threshold_mask(volume, disc, 30, 90)
    y = 5.0 + 0.5 * np.arange(40)[:, None]
    x = -7.0 + 0.7 * np.arange(50)[None, :]
    inside = (y - 14.0) ** 2 + (x - 8.0) ** 2 <= 36.0
    part = volume.hu[first : last + 1]
    expected = part[inside & (part >= 30) & (part <= 90)]
    answer = measure("region_statistics", volume, found)
    assert answer.n.value == expected.size
    assert answer.mean.value == pytest.approx(expected.mean(), rel=1e-12)
    assert (answer.minimum.value, answer.maximum.value) == (expected.min(), expected.max())
    assert found.name == "insert (30 to 90)"


def test_open_ends(volume):
    box = Box((14.0, 8.0), (10.0, 10.0), z_mm=-3.0)
    low, high = threshold_mask(volume, box, high=40), threshold_mask(volume, box, 41)
    both = threshold_mask(volume, box)
    counts = [measure("region_statistics", volume, one).n.value for one in (low, high, both)]
    assert counts[0] + counts[1] == counts[2]
    assert (low.name, high.name) == ("(up to 40)", "(from 41)")


def test_padding_never_counts(volume):
    padding = np.full((6, 2), math.nan)
    padding[0] = (-2000, 0)
    marked = Volume(volume.hu, volume.spacing_mm, volume.origin_mm, padding_hu=padding)
    box = Box((14.0, 8.0), (10.0, 10.0), z_mm=-3.0)
    found = threshold_mask(marked, box)
    assert measure("region_statistics", marked, found).minimum.value > 0


def test_nothing_in_range_says_so(volume):
    found = threshold_mask(volume, Disc((14.0, 8.0), 6.0, z_mm=-3.0), 5000, 6000)
    assert not found
    assert "no pixel of the region has a value from 5000 to 6000 HU" in found.reason


def test_uneven_slices_are_refused_and_a_single_one_is_not(volume):
    positions = np.array([0.0, 2.0, 4.0, 9.0, 11.0, 13.0])
    uneven = Volume(volume.hu, volume.spacing_mm, slice_positions_mm=positions)
    disc = Disc((10.0, 15.0), 6.0, z_mm=(0.0, 13.0))
    assert "unevenly spaced" in threshold_mask(uneven, disc, 0, 50).reason
    assert threshold_mask(uneven, Disc((10.0, 15.0), 6.0, z_mm=9.0), 0, 50)


def test_an_upside_down_range_is_misuse(volume):
    with pytest.raises(ArgumentError, match="must be given as"):
        threshold_mask(volume, Disc((10.0, 15.0), 6.0, z_mm=0.0), 50, 0)
