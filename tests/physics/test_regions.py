"""Regions refuse what cannot be measured, and know their areas."""

from __future__ import annotations

import math
import pickle

import numpy as np
import pytest

from ct_measure_plugin.errors import RegionError
from ct_measure_plugin.physics.regions import (
    Box,
    Disc,
    Ellipse,
    Ellipsoid,
    Mask,
    Polygon,
    Segment,
)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: Disc((0, 0), -4.0), r"'radius_mm' must be greater than 0, got -4\.0"),
        (lambda: Disc((0, math.nan), 1.0), r"'center_mm' must be finite"),
        (lambda: Ellipse((0, 0), (1.0, 0.0)), r"'radii_mm' must be greater than 0"),
        (lambda: Box((0, 0), (1.0, math.inf)), r"'size_mm' must be finite"),
        (lambda: Polygon(((0, 0), (1, 1))), r"'vertices_mm' must have at least 3 corners, got 2"),
        (lambda: Polygon(((0, 0), (0, 1), (0, 2))), r"'vertices_mm' must enclose an area"),
        (lambda: Segment((1, 1), (1, 1)), r"'end_mm' must differ from start_mm"),
        (lambda: Segment((1, 1), (1, 2), -1.0), r"'width_mm' must not be negative"),
        (lambda: Disc((0, 0), 1.0, z_mm=(5.0, 1.0)), r"'z_mm' must be given as \(low, high\)"),
        (lambda: Disc((0, 0), 1.0, values=(2.0, 1.0)), r"'values' must be given as \(low, high\)"),
        (lambda: Disc((0, 0), 1.0, values=(math.nan, 1.0)), r"'values' must be given as"),
        (lambda: Disc((0, 0), 1.0, code="rod"), r"'code' must be scheme:value"),
        (lambda: Disc((0, 0), 1.0, code=":rod"), r"'code' must be scheme:value"),
        (lambda: Disc((0, 0), 1.0, code="S:" + 17 * "9"), r"each of 1 to 16 characters"),
        (lambda: Ellipsoid((0, 0), (1, 1), 1.0), r"'z_mm' must be the position of the centre"),
        (lambda: Ellipsoid((0, 0), (1, 1), -1.0, z_mm=1.0), r"'z_radius_mm' must be greater"),
        (lambda: Mask(np.zeros((3, 3), bool), (1, 1, 1)), r"must hold at least one pixel"),
        (lambda: Mask(np.ones((3, 3)), (1, 1, 1)), r"must be an array of bool"),
        (lambda: Mask(np.ones(3, bool), (1, 1, 1)), r"must be 2-D or 3-D"),
    ],
)
def test_bad_regions_say_what_is_wrong(make, message):
    with pytest.raises(RegionError, match=message):
        make()


@pytest.mark.parametrize(
    "corners",
    [
        ((0, 0), (4, 4), (4, 0), (0, 4)),
        ((0, 0), (0, 6), (3, 6), (-2, 3), (3, 0)),
        ((0, 0), (0, 4), (4, 4), (4, -1), (2, 5), (2, -2)),
    ],
    ids=["bow tie", "two crossings", "spiral"],
)
def test_a_polygon_that_crosses_itself_is_refused(corners):
    with pytest.raises(RegionError, match="must not cross itself"):
        Polygon(corners)


def test_areas_in_closed_form():
    assert Disc((3, 4), 2.0).area_mm2 == pytest.approx(4 * math.pi)
    assert Ellipse((3, 4), (2.0, 5.0), 33.0).area_mm2 == pytest.approx(10 * math.pi)
    assert Box((3, 4), (2.0, 5.0), 33.0).area_mm2 == 10.0
    assert Polygon(((1e6, 1e6), (1e6, 1e6 + 3), (1e6 + 2, 1e6 + 3))).area_mm2 == pytest.approx(3.0)
    assert Segment((0, 0), (3, 4)).length_mm == 5.0


def test_regions_and_their_errors_travel_between_processes():
    disc = Disc((3, 4), 2.0, z_mm=(1.0, 5.0), name="water")
    assert pickle.loads(pickle.dumps(disc)) == disc  # noqa: S301 - our own bytes
    with pytest.raises(RegionError) as caught:
        Disc((0, 0), -1.0)
    again = pickle.loads(pickle.dumps(caught.value))  # noqa: S301
    assert str(again) == str(caught.value)
