"""Pixels cut from a Volume for measurements that need a whole upright box."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.measurements.boxes import cut_box
from ct_measure_plugin.physics.regions import Box, Disc
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.volume import Volume

VOLUME = Volume(
    np.arange(3 * 40 * 50).reshape(3, 40, 50), (2.0, 0.5, 0.4), origin_mm=(10.0, -5.0, 3.0)
)


def test_pixels_whose_centres_lie_inside_are_cut():
    box = cut_box(VOLUME, Box((0.0, 11.0), (4.0, 3.2), z_mm=12.0), least=4)
    # rows from -2 to 2 mm are 6 to 14, columns from 9.4 to 12.6 mm 16 to 24
    np.testing.assert_array_equal(box.values, VOLUME.hu[1:2, 6:15, 16:25])
    assert box.origin_mm == pytest.approx((-2.0, 9.4))
    assert box.slices == [1]
    assert box.cautions == ()


def test_a_disc_brings_the_square_around_it():
    box = cut_box(VOLUME, Disc((0.0, 11.0), 2.0), least=4)
    np.testing.assert_array_equal(box.values, VOLUME.hu[:, 6:15, 15:26])


@pytest.mark.parametrize("angle", [0.3, 10.0, 30.0, 44.9, 45.0, 60.0, 89.0, 133.0, -25.0])
@pytest.mark.parametrize("size", [(10.0, 10.0), (12.0, 5.0), (4.0, 13.0)])
def test_of_a_turned_box_the_largest_upright_box_inside_is_taken(angle, size):
    """Against a search over all upright boxes on a grid of 0.02 mm."""
    from ct_measure_plugin.measurements.boxes import _upright

    _, (high, wide) = _upright(Box((0, 0), size, angle))
    p, q = np.mgrid[0.02:18:0.02, 0.02:18:0.02]
    sin, cos = abs(np.sin(np.radians(angle))), abs(np.cos(np.radians(angle)))
    inside = (p * cos + q * sin <= size[1] + 1e-9) & (p * sin + q * cos <= size[0] + 1e-9)
    best = float((p * q * inside).max())
    assert wide * cos + high * sin <= size[1] + 1e-9
    assert wide * sin + high * cos <= size[0] + 1e-9
    # a grid step of 0.02 on sides of up to 13 changes the area by at most 0.02 (p + q)
    assert wide * high >= best - 1e-9
    assert wide * high <= best + 0.02 * (wide + high)


def test_what_is_missing_is_said():
    padded = Volume(
        np.zeros((1, 40, 40)), (1.0, 0.5, 0.5), padding_hu=np.array([[-2000.0, -1900.0]])
    )
    padded.hu[0, 20, 20] = -2000
    for volume, region, words in (
        (VOLUME, Box((0.0, 100.0), (4.0, 4.0)), "outside"),
        (VOLUME, Box((0.0, 11.0), (4.0, 4.0), z_mm=90.0), "outside"),
        (VOLUME, Box((0.0, 11.0), (1.0, 4.0)), "at least 4"),
        (padded, Box((10.0, 10.0), (8.0, 8.0)), "padding"),
    ):
        found = cut_box(volume, region, least=4)
        assert isinstance(found, NotMeasured)
        assert words in found.reason
        assert found.remedy


def test_a_box_over_the_border_is_cut_there_and_cautioned():
    box = cut_box(VOLUME, Box((-5.0, 11.0), (4.0, 4.0), z_mm=12.0), least=4)
    assert box.values.shape == (1, 5, 11)
    assert {c.code for c in box.cautions} == {"outside-image"}
