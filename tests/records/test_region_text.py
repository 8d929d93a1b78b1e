"""Regions survive being written down, and bad text is refused by name."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest

from ct_measure_plugin.errors import RegionError
from ct_measure_plugin.physics.regions import (
    Box,
    Disc,
    Ellipse,
    Ellipsoid,
    Labels,
    Mask,
    Path,
    Polygon,
    Segment,
)
from ct_measure_plugin.records import region_from_dict, region_to_dict

REGIONS = [
    Disc((0.1 + 0.2, -3.0), 7.0, z_mm=4.0, name="water"),
    Ellipse((1, 2), (3, 4), 33.0, z_mm=(1.0, 9.0)),
    Box((1, 2), (3, 4)),
    Polygon(((0, 0), (0, 5), (5, 1.25))),
    Segment((0, 0), (3, 4), 1.5, name="ä ± µ"),
    Path(((0, 0), (0, 5.5), (3, 4)), 1.5),
    Ellipsoid((1, 2), (3, 4), 5.5, 20.0, z_mm=7.0, group="rod", code="99LAB:ROD-1"),
    Disc((1, 2), 3, values=(-math.inf, 30.0), name="below"),
]


@pytest.mark.parametrize(
    "region", REGIONS, ids=[f"{i} {region.kind}" for i, region in enumerate(REGIONS)]
)
def test_a_region_comes_back_the_same(region):
    text = json.dumps(region_to_dict(region))
    assert region_from_dict(json.loads(text)) == region


@pytest.mark.parametrize("shape", [(7, 5), (3, 11, 13)])
def test_a_mask_comes_back_pixel_by_pixel(shape):
    inside = np.random.default_rng(1).random(shape) < 0.4
    mask = Mask(inside, (2.0, 0.5, 0.7), (1.0, 2.0, 3.0), z_mm=5.0)
    again = region_from_dict(json.loads(json.dumps(region_to_dict(mask))))
    assert isinstance(again, Mask)
    np.testing.assert_array_equal(again.inside, inside)
    assert (again.spacing_mm, again.origin_mm, again.z_mm) == (
        mask.spacing_mm, mask.origin_mm, mask.z_mm,
    )  # fmt: skip


@pytest.mark.parametrize("highest", [3, 300, 70_000, 2**40, -5])
@pytest.mark.parametrize("shape", [(7, 5), (3, 11, 13)])
def test_a_label_map_comes_back_number_by_number(shape, highest):
    numbers = np.random.default_rng(2).integers(0, 4, shape).astype(np.int64)
    numbers[numbers == 3] = highest
    labels = Labels(
        numbers, (2.0, 0.5, 0.7), (1.0, 2.0, 3.0), names=((1, "rod"),), codes=((1, "99LAB:ROD"),)
    )
    again = region_from_dict(json.loads(json.dumps(region_to_dict(labels))))
    assert isinstance(again, Labels)
    np.testing.assert_array_equal(again.labels, numbers)
    assert (again.spacing_mm, again.origin_mm, again.names, again.codes) == (
        labels.spacing_mm, labels.origin_mm, labels.names, labels.codes,
    )  # fmt: skip
    assert region_to_dict(again) == region_to_dict(labels)


LABELS = {"kind": "labels", "spacing_mm": [1, 1, 1]}
PACKED = {"shape": [2, 2], "type": "u1", "numbers": "eJxjYGRgAgAACQAE"}


@pytest.mark.parametrize(
    ("given", "message"),
    [
        ("disc", "'region' must be a set of named values"),
        ({"kind": "blob"}, "'kind' must be one of box, disc"),
        ({"kind": "disc", "radius_mm": 3}, "'center_mm' must be given for a disc"),
        ({"kind": "disc", "center_mm": [0, 0], "radius_mm": 3, "hue": 1}, "'hue' must be one"),
        ({"kind": "disc", "center_mm": [0, 0], "radius_mm": "3"}, "'radius_mm' must be a number"),
        ({"kind": "disc", "center_mm": [0, 0], "radius_mm": True}, "'radius_mm' must be a number"),
        ({"kind": "disc", "center_mm": [0, 0], "radius_mm": 3, "name": 4}, "'name' must be text"),
        ({"kind": "disc", "center_mm": [0, 0], "radius_mm": 3, "code": "rod"},
         "'code' must be scheme:value"),
        ({"kind": "disc", "center_mm": [0, 0], "radius_mm": 3, "values": 4},
         "'values' must be two numbers"),
        ({"kind": "disc", "center_mm": [0, 0], "radius_mm": 3, "values": [4, 3]},
         r"'values' must be given as \(low, high\)"),
        ({**LABELS, "labels": 3}, "'labels' must hold the shape"),
        ({**LABELS, "labels": {**PACKED, "type": "f8"}}, "'labels' must hold the shape"),
        ({**LABELS, "labels": {**PACKED, "shape": [9, 9]}}, "'labels' must hold the shape"),
        ({**LABELS, "labels": {**PACKED, "numbers": "?"}}, "'labels' must hold the shape"),
        ({**LABELS, "labels": PACKED, "names": 3}, "'names' must be pairs of a label and a text"),
        ({**LABELS, "labels": PACKED, "names": [[1, 2]]}, "'names' must be pairs"),
        ({**LABELS, "labels": PACKED, "codes": [["a", "b"]]}, "'codes' must be pairs"),
        ({"kind": "mask", "inside": {"shape": [9, 9], "bits": "eJw="}, "spacing_mm": [1, 1, 1]},
         "'inside' must hold the shape"),
        ({"kind": "mask", "inside": {"shape": [10**6, 10**6], "bits": ""}, "spacing_mm": [1, 1, 1]},
         "'inside' must hold the shape"),
    ],
)  # fmt: skip
def test_bad_text_is_refused_by_name(given, message):
    with pytest.raises(RegionError, match=message):
        region_from_dict(given)


def test_a_mask_that_would_unpack_without_end_is_cut_short():
    import base64
    import zlib

    bomb = base64.b64encode(zlib.compress(b"\0" * 10**7)).decode()
    given = {"kind": "mask", "inside": {"shape": [8, 8], "bits": bomb}, "spacing_mm": [1, 1, 1]}
    with pytest.raises(RegionError, match="'inside' must hold the shape"):
        region_from_dict(given)


def test_text_is_json_that_any_reader_takes():
    """Infinity is no JSON; an open end is null."""
    text = json.dumps(region_to_dict(Disc((1, 2), 3, values=(5.0, math.inf))), allow_nan=False)
    assert json.loads(text)["values"] == [5.0, None]
