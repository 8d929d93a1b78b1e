"""Rings through the door of the measurements: regions, centre, marks."""

from __future__ import annotations

import numpy as np
import pytest

import ct_measure_plugin as ctm
from ct_measure_plugin.measurements.catalogue import find, settings_for
from ct_measure_plugin.virtual_scanner import samples


def test_a_scan_with_bad_channels_needs_no_region():
    volume = ctm.read_series(samples.folder("rings"))
    found = ctm.measure("ring_artefact", volume)
    assert found.rings_found.value >= 3
    assert {c.code for c in found.cautions} >= {"rings-found", "simulated"}
    picture = found.ring_map
    middle = np.asarray(picture.origin) + (np.asarray(picture.values.shape) - 1) / 2 * 0.5
    assert middle == pytest.approx((0.0, 0.0), abs=0.5)  # in the image frame
    assert found.center_y.y[0] == pytest.approx(0.0, abs=0.3)  # the isocentre is the origin


def test_regions_choose_slices_and_pixels():
    volume = ctm.read_series(samples.folder("rings"))
    inner = ctm.regions.Disc((0.0, 0.0), 18.0, z_mm=(1.0, 9.0))
    found = ctm.measure("ring_artefact", volume, inner)
    assert len(found.worst_along_z.x) == 4
    assert found.worst_radius.value < 18
    marks = find("ring_artefact").marks(volume, (inner,), settings_for("ring_artefact", {}), found)
    assert [m.radius_mm for m in marks] == [ring.radius.value for ring in found.rings]


def test_nothing_is_drawn_where_no_ring_was_found():
    volume = ctm.read_series(samples.folder("standard"))
    water = ctm.regions.Disc((0.0, 0.0), 50.0, z_mm=(10.0, 20.0))
    found = ctm.measure("ring_artefact", volume, water)
    assert found.rings_found.value == 0
    assert (
        find("ring_artefact").marks(volume, (water,), settings_for("ring_artefact", {}), found)
        == ()
    )


def test_the_centre_can_be_given():
    noise = np.random.default_rng(1).normal(0, 8, (1, 96, 96))
    y, x = np.mgrid[:96, :96]
    ring = 12.0 * (np.abs(np.hypot(y - 52, x - 44) - 24) < 1)
    volume = ctm.Volume((noise + ring).astype(np.float32), (1.0, 1.0, 1.0), origin_mm=(0, -40, -40))
    region = ctm.regions.Disc((12.0, 4.0), 40.0)
    given = ctm.measure("ring_artefact", volume, region, isocentre_mm=(12.0, 4.0))
    assert given.worst_radius.value == pytest.approx(24, abs=1.0)
    assert given.rings_found.value == 1
    middle = ctm.measure("ring_artefact", volume, region)
    assert middle.significance.value < given.significance.value


def test_nowhere_is_refused():
    volume = ctm.Volume(np.zeros((2, 64, 64)), (1.0, 1.0, 1.0))
    away = ctm.regions.Disc((32.0, 32.0), 20.0, z_mm=(50.0, 60.0))
    assert not ctm.measure("ring_artefact", volume, away)
