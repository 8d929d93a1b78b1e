"""Region files come back as they were written, say their frame, and tell every fault."""

from __future__ import annotations

import json
import math
from pathlib import Path

import jsonschema
import numpy as np
import pytest

from ct_measure_plugin.errors import RegionFileError
from ct_measure_plugin.physics import regions
from ct_measure_plugin.physics.regions import (
    Box,
    Disc,
    Ellipse,
    Ellipsoid,
    Mask,
    Polygon,
    Segment,
)
from ct_measure_plugin.physics.volume import Source, Volume
from ct_measure_plugin.records import Frame, read_regions, regions_from_text, write_regions

SCHEMA = json.loads((Path(__file__).parents[2] / "docs/region_file.schema.json").read_text())

REGIONS = (
    Disc((0.1 + 0.2, -3.0), 7.0, z_mm=4.0, name="ä ± µ", group="rod", code="99LAB:ROD"),
    Ellipse((1, 2), (3, 4), 33.0, z_mm=(1.0, 9.0)),
    Ellipsoid((1, 2), (3, 4), 5.0, 10.0, z_mm=7.0, values=(-math.inf, 30.0)),
    Box((1, 2), (3, 4), values=(5.0, 6.0)),
    Polygon(((0, 0), (0, 5), (5, 1.25))),
    Segment((0, 0), (3, 4), 1.5),
    regions.Path(((0, 0), (0, 5.5), (3, 4)), 1.5, z_mm=2.0, name="bend"),
)

AXES = np.array([[0.0, 0.0, 1.0], [0.0, 1.0, 0.0], [1.0, 0.0, 0.0]])


def volume(direction=AXES) -> Volume:
    return Volume(
        np.zeros((3, 8, 8)),
        (2.0, 1.0, 1.0),
        direction_lps=direction,
        source=Source(series_digest="ab12"),
    )


def test_regions_come_back_the_same(tmp_path):
    kept = read_regions(write_regions(REGIONS, tmp_path / "a.regions.json", title="Rods"))
    assert kept.regions == REGIONS
    assert kept.title == "Rods"
    assert kept.frame == Frame()


@pytest.mark.parametrize("shape", [(7, 5), (3, 11, 13)])
def test_a_mask_comes_back_pixel_by_pixel(tmp_path, shape):
    inside = np.random.default_rng(1).random(shape) < 0.4
    mask = Mask(inside, (2.0, 0.5, 0.7), (1.0, 2.0, 3.0), name="label 4")
    [again] = read_regions(write_regions([mask], tmp_path / "m.json")).regions
    np.testing.assert_array_equal(again.inside, inside)
    assert (again.spacing_mm, again.origin_mm, again.name) == (
        mask.spacing_mm, mask.origin_mm, "label 4",
    )  # fmt: skip


def test_what_is_written_fits_its_schema(tmp_path):
    inside = np.ones((3, 4), bool)
    file = write_regions([*REGIONS, Mask(inside, (1, 1, 1))], tmp_path / "a.json", volume=volume())
    jsonschema.Draft202012Validator(SCHEMA).validate(json.loads(file.read_text(encoding="utf-8")))


def test_the_frame_is_the_volumes(tmp_path):
    frame = read_regions(write_regions(REGIONS, tmp_path / "a.json", volume=volume())).frame
    assert frame == Frame.of(volume())
    assert (frame.kind, frame.series_digest) == ("patient", "ab12")
    assert frame.problem(volume()) == ""


def test_another_frame_is_told():
    turn = math.radians(7.0)
    tilted = np.array(
        [[0, -math.sin(turn), math.cos(turn)], [0, math.cos(turn), math.sin(turn)], [1, 0, 0]]
    )
    assert "lie 7.0° away" in Frame.of(volume()).problem(volume(tilted))
    plain = Volume(np.zeros((3, 8, 8)), (2.0, 1.0, 1.0))
    assert "the frame of a patient, the volume in a plain array" in Frame.of(volume()).problem(
        plain
    )
    assert Frame().problem(plain) == ""


def text(**changes) -> str:
    data = {
        "type": "FeatureCollection",
        "format": "ct-measure-plugin regions",
        "version": 1,
        "frame": {"kind": "array", "unit": "mm"},
        "features": [],
    }
    return json.dumps({**data, **changes})


def feature(geometry, **properties):
    return {"type": "Feature", "properties": properties, "geometry": geometry}


DISC = {"type": "disc", "center_mm": [1, 2], "radius_mm": 3}


@pytest.mark.parametrize(
    ("given", "faults"),
    [
        ("{", ["text: is not valid JSON"]),
        ("[" * 100_000, ["text: is not valid JSON"]),
        ("[]", ["does not say that its format"]),
        (text(version=2), ["version: must be 1, got 2"]),
        (text(frame={"kind": "array", "unit": "px"}), ["frame: 'unit' must be 'mm', got 'px'"]),
        (text(frame=None, features=3), ["frame: 'frame' must be", "features: must be a list"]),
        (text(frame={"kind": "patient", "unit": "mm"}), ["'direction_lps' must be three unit"]),
        (text(frame={"kind": "patient", "unit": "mm", "direction_lps": [[1, 0, 0]] * 3}),
         ["'direction_lps' must be three unit"]),
        (text(title=3), ["title: must be text"]),
        (text(features=[feature(DISC), feature({**DISC, "radius_mm": -4}), feature(None)]),
         ["features[1]: 'radius_mm' must be greater than 0", "features[2]: 'geometry' must be"]),
        (text(features=[feature({**DISC, "type": "blob"})]),
         ["features[0]: 'kind' must be one of"]),
        (text(features=[feature({**DISC, "center_mm": [1]})]), ["'center_mm' must be two numbers"]),
        (text(features=[feature({**DISC, "center_mm": [1, math.nan]})]),
         ["'center_mm' must be finite"]),
        (text(features=[feature({**DISC, "name": "x"})]), ["'name' does not belong in a geometry"]),
        (text(features=[feature(DISC, **{"class": 3})]), ["'group' must be text"]),
        (text(features=[feature(DISC, code="rod")]), ["'code' must be scheme:value"]),
        (text(features=[{"type": "Point"}]), ["features[0]: 'feature' must be of type Feature"]),
        (text(features=["disc"]), ["features[0]: 'feature' must be of type Feature"]),
    ],
    ids=range(18),
)  # fmt: skip
def test_every_fault_is_told_with_its_place(given, faults):
    with pytest.raises(RegionFileError) as caught:
        regions_from_text(given)
    for fault in faults:
        assert fault in str(caught.value)


@pytest.mark.parametrize(
    "geometry",
    [{**DISC, "radius_mm": -1}, {**DISC, "hue": 1}, {"type": "disc"}, {**DISC, "z_mm": "4"}],
    ids=range(4),
)  # fmt: skip
def test_the_schema_refuses_what_the_reader_refuses(geometry):
    data = text(features=[feature(geometry)])
    with pytest.raises(RegionFileError):
        regions_from_text(data)
    assert not jsonschema.Draft202012Validator(SCHEMA).is_valid(json.loads(data))


def test_other_peoples_properties_are_left_alone():
    [region] = regions_from_text(text(features=[feature(DISC, name="a", colour="red")])).regions
    assert region == Disc((1, 2), 3, name="a")


def test_a_file_that_is_not_there_or_not_text_says_so(tmp_path):
    with pytest.raises(RegionFileError, match=r"none\.json: cannot be read"):
        read_regions(tmp_path / "none.json")
    (tmp_path / "b.json").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(RegionFileError, match=r"b\.json: is not UTF-8"):
        read_regions(tmp_path / "b.json")
