"""Object and background on a Volume: which is which, and what is wrong with them."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.errors import RegionError
from ct_measure_plugin.measurements import measure
from ct_measure_plugin.physics.regions import Box, Disc
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.volume import Volume

NAME = "region_contrast"


def volume() -> Volume:
    hu = np.rint(np.random.default_rng(8).normal(0, 10, (3, 80, 80))).astype(np.int16)
    hu[:, 10:31, 10:31] += 50
    return Volume(hu, (2.0, 0.5, 0.5))


ROD = Disc((10.0, 10.0), 4.0, z_mm=2.0, name="rod")
WATER = Disc((28.0, 28.0), 4.0, z_mm=2.0)


def test_the_first_region_is_the_object():
    found, turned = measure(NAME, volume(), (ROD, WATER)), measure(NAME, volume(), (WATER, ROD))
    assert found.difference.value == pytest.approx(50, abs=3 * found.difference.uncertainty)
    assert turned.difference.value == -found.difference.value
    assert found.cnr.value == pytest.approx(5.0, abs=3 * found.cnr.uncertainty)
    own = measure("region_statistics", volume(), ROD)
    assert found.object_mean == own.mean


@pytest.mark.parametrize(("apart", "code"), [(3.0, True), (9.0, False)])
def test_shared_pixels_are_told(apart, code):
    other = Disc((28.0, 28.0 - apart), 4.0, z_mm=2.0)
    found = measure(NAME, volume(), (WATER, other))
    assert ("regions-overlap" in {c.code for c in found.cautions}) is code


def test_the_share_is_that_of_the_circles():
    """Two circles of radius r at distance d share 2 r² acos(d/2r) - d/2 sqrt(4r² - d²)."""
    r, d = 4.0, 3.0
    found = measure(NAME, volume(), (WATER, Disc((28.0, 28.0 - d), r, z_mm=2.0)))
    lens = 2 * r * r * np.arccos(d / (2 * r)) - d / 2 * np.sqrt(4 * r * r - d * d)
    said = next(c.text for c in found.cautions if c.code == "regions-overlap")
    assert f"share {100 * lens / (np.pi * r * r):.0f} %" in said


def test_regions_on_other_slices_share_nothing():
    found = measure(NAME, volume(), (WATER, Disc(WATER.center_mm, 4.0, z_mm=0.0)))
    assert "regions-overlap" not in {c.code for c in found.cautions}


def test_unlike_sizes_and_each_regions_cautions_are_told_by_name():
    found = measure(NAME, volume(), (Disc((10, 10), 1.6, z_mm=2.0, name="rod"), WATER))
    said = {c.code: c.text for c in found.cautions}
    assert "differ in size by a factor of 6.2" in said["unlike-sizes"]
    assert said["few-pixels"].startswith("Rod: The region holds")
    assert "no-uncertainty" not in said


def test_what_cannot_be_measured_names_the_region():
    found = measure(NAME, volume(), (ROD, Box((900, 900), (3, 3), z_mm=2.0)))
    assert isinstance(found, NotMeasured)
    assert found.reason == "background 1: the region lies outside the volume"
    tiny = measure(NAME, volume(), (Disc((10, 10), 0.3, z_mm=2.0), WATER))
    assert tiny.reason.startswith("the object: the region holds")


def test_one_region_is_not_enough():
    with pytest.raises(RegionError, match="at least 2 for region_contrast"):
        measure(NAME, volume(), ROD)
