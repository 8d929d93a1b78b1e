"""The Volume keeps its geometry straight."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.volume import Volume


def test_a_flat_array_becomes_one_slice():
    volume = Volume(np.zeros((4, 5), np.int16), (0.5, 0.5))
    assert volume.shape == (1, 4, 5)
    assert volume.spacing_mm == (1.0, 0.5, 0.5)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ((np.zeros(5), (1, 1, 1)), r"'hu' must have shape \(nz, ny, nx\)"),
        ((np.zeros((0, 5, 5)), (1, 1, 1)), r"'hu' must have shape"),
        ((np.zeros((2, 5, 5), complex), (1, 1, 1)), "'hu' must hold real numbers"),
        ((np.zeros((2, 5, 5)), (1, 0, 1)), r"'spacing_mm' must be \(dz, dy, dx\)"),
        ((np.zeros((2, 5, 5)), (1, 1, 1), (0, 0, 0), np.array([3.0, 1.0])), "increasing positions"),
    ],
)
def test_bad_volumes_say_what_is_wrong(arguments, message):
    with pytest.raises(ArgumentError, match=message):
        Volume(*arguments)


def test_even_spacing_allows_a_hundredth():
    positions = np.array([0.0, 5.0, 10.04, 15.0])
    even = Volume(np.zeros((4, 2, 2)), (5.0, 1, 1), slice_positions_mm=positions)
    assert even.evenly_spaced
    gap = Volume(np.zeros((3, 2, 2)), (5.0, 1, 1), slice_positions_mm=np.array([0.0, 5.0, 15.0]))
    assert not gap.evenly_spaced


def test_the_nearest_slice_is_within_half_a_gap():
    volume = Volume(np.zeros((3, 2, 2)), (2.0, 1, 1), origin_mm=(10.0, 0, 0))
    assert [volume.nearest_slice(z) for z in (9.1, 10.9, 11.1, 14.9)] == [0, 0, 1, 2]
    with pytest.raises(ArgumentError, match=r"'z_mm' must lie within 10 to 14 mm, got 15\.2"):
        volume.nearest_slice(15.2)


def test_padding_is_a_range_for_each_slice():
    hu = np.array([[[-2000, 5]], [[-2000, -1024]]], np.int16)
    padding = np.array([[-2000.0, -2000.0], [np.nan, np.nan]])
    volume = Volume(hu, (1, 1, 1), padding_hu=padding)
    assert volume.padding(0).tolist() == [[True, False]]
    assert volume.padding(1) is None
