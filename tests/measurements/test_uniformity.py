"""Uniformity through the door of the measurements: regions, frame, marks."""

from __future__ import annotations

import numpy as np
import pytest

import ct_measure_plugin as ctm
from ct_measure_plugin.errors import ArgumentError, RegionError
from ct_measure_plugin.measurements.catalogue import find, settings_for
from ct_measure_plugin.virtual_scanner import samples


def water(origin=(0.0, 0.0, 0.0), radius=24.0):
    y, x = np.mgrid[:96, :96] * 0.6
    inside = np.hypot(y - 28.2, x - 29.1) < radius
    noise = np.random.default_rng(1).normal(0, 8, (4, 96, 96))
    values = np.where(inside, noise, -1000).astype(np.float32)
    return ctm.Volume(values, (2.0, 0.6, 0.6), origin_mm=origin)


def test_it_needs_no_region_and_answers_in_the_image_frame():
    at = ctm.measure("uniformity", water(origin=(10.0, -30.0, -28.0)))
    assert at.slices.value == 4
    assert at.center_y.x.tolist() == [10, 12, 14, 16]
    assert at.center_y.y[0] == pytest.approx(28.2 - 30.0, abs=0.1)
    assert at.center_x.y[0] == pytest.approx(29.1 - 28.0, abs=0.1)
    assert at.deviation_map.origin[0] == pytest.approx(28.2 - 30 - 0.9 * 24, abs=1.0)


def test_a_region_chooses_the_slices_or_is_the_cylinder():
    volume = water()
    drawn = ctm.regions.Disc((28.2, 29.1), 20.0, z_mm=(1.0, 5.0))
    found = ctm.measure("uniformity", volume, drawn)
    assert found.slices.value == 2
    assert found.radius.value == pytest.approx(24.0, abs=0.1)
    taken = ctm.measure("uniformity", volume, drawn, placement="as drawn")
    assert taken.radius.value == 20.0
    assert taken.ellipticity is None


def test_the_marks_are_where_it_looked():
    volume = water()
    settings = settings_for("uniformity", {"edge_regions": 3, "first_deg": 90.0})
    answer = find("uniformity").measure(volume, (), settings)
    marks = find("uniformity").marks(volume, (), settings, answer)
    assert len(marks) == 4 * (2 + 3)
    circle, centre, top, *_ = marks
    assert circle.radius_mm == answer.radius.value
    assert centre.radius_mm == pytest.approx(0.1 * answer.radius.value)
    assert top.center_mm[0] < circle.center_mm[0] - 15  # +y points down
    assert circle.z_mm == 0.0


def test_misuse_and_refusal():
    volume = water()
    disc = ctm.regions.Disc((28.2, 29.1), 20.0)
    with pytest.raises(RegionError, match="at most 1"):
        ctm.measure("uniformity", volume, (disc, disc))
    with pytest.raises(ArgumentError, match="without a disc"):
        ctm.measure("uniformity", volume, placement="as drawn")
    box = ctm.regions.Box((28.2, 29.1), (10.0, 10.0))
    with pytest.raises(ArgumentError, match="unless a disc is drawn"):
        ctm.measure("uniformity", volume, box, placement="as drawn")
    nowhere = ctm.regions.Disc((28.2, 29.1), 20.0, z_mm=(90.0, 95.0))
    assert not ctm.measure("uniformity", volume, nowhere)
    rods = ctm.measure("uniformity", ctm.read_series(samples.folder("standard")))
    assert not rods
    assert {c.code for c in rods.cautions} >= {"simulated"}
