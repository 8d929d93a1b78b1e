"""Regions in words, as people type them."""

from __future__ import annotations

import math

import numpy as np
import pytest

from ct_measure_plugin.cli.region_words import region_from_words
from ct_measure_plugin.cli.words_of_regions import words_of
from ct_measure_plugin.errors import RegionError
from ct_measure_plugin.physics.regions import Disc, Ellipsoid, Mask, Path, Polygon, Segment
from ct_measure_plugin.physics.volume import Volume

VOLUME = Volume(np.zeros((5, 64, 64)), (2.0, 1.0, 1.0), origin_mm=(10.0, 0.0, 0.0))

WORDS = {
    "disc center=30,31 radius=9 slice=2 name=water": Disc((30, 31), 9, z_mm=14.0, name="water"),
    "disc center=-3,1e1 diameter=9 z=10:14": Disc((-3, 10), 4.5, z_mm=(10.0, 14.0)),
    "disc center=3,1 radius=9 slice=1:3": Disc((3, 1), 9, z_mm=(12.0, 16.0)),
    "ellipsoid center=3,1 radii=2,4 z-radius=5 angle=30 z=14 class=rod code=99LAB:ROD": Ellipsoid(
        (3, 1), (2, 4), 5, 30, z_mm=14.0, group="rod", code="99LAB:ROD"
    ),
    "polygon vertices=0,0;0,9;9,0 values=-20:": Polygon(
        ((0, 0), (0, 9), (9, 0)), values=(-20.0, math.inf)
    ),
    "segment start=0,0 end=3,4 width=2 values=:7": Segment(
        (0, 0), (3, 4), 2, values=(-math.inf, 7.0)
    ),
    "path vertices=0,0;0,9;9,9 width=1.5 slice=0": Path(((0, 0), (0, 9), (9, 9)), 1.5, z_mm=10.0),
}


@pytest.mark.parametrize("words", WORDS)
def test_words_are_regions(words):
    assert region_from_words(words, VOLUME) == WORDS[words]


@pytest.mark.parametrize(
    ("words", "message"),
    [
        ("", "'region' must name a kind"),
        ("disc center=1,2 radius=9 hue=3", "'region' must use the names center, radius"),
        ("disc center=1,2,3 radius=9", "'center' must be two numbers y,x"),
        ("disc center=1,2 radius=big", "'radius' must be a number"),
        ("disc center=1,2 radius=9 slice=7", "'slice' must lie within 0 to 4"),
        ("disc center=1,2 radius=9 values=7", "'values' must be LOW:HIGH"),
        ("disc center=1,2 radius=9 code=rod", "'code' must be scheme:value"),
        ("ellipsoid center=1,2 radii=3,3 z-radius=3", "'z_mm' must be the position"),
    ],
)
def test_words_that_are_none_say_why(words, message):
    with pytest.raises(RegionError, match=message):
        region_from_words(words, VOLUME)


@pytest.mark.parametrize("region", WORDS.values(), ids=lambda region: region.kind)
def test_words_written_are_the_region_read(region):
    assert region_from_words(words_of(region), VOLUME) == region


def test_numbers_are_written_to_the_last_bit():
    region = Disc((0.1 + 0.2, -1 / 3), 1e-5, z_mm=14.0)
    assert region_from_words(words_of(region), VOLUME) == region


def test_what_no_words_describe_is_refused():
    with pytest.raises(RegionError, match="'name' must be one word, got 'left rod'"):
        words_of(Disc((0, 0), 1, name="left rod"))
    mask = Mask(np.ones((2, 2), bool), (1.0, 1.0))
    with pytest.raises(RegionError, match="must be of a kind that words describe, got 'mask'"):
        words_of(mask)
