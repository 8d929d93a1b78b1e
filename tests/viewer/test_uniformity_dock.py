"""Uniformity and rings in their docks: no region needed, drawn where they were found, as layers."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.dicom import read_series
from ct_measure_plugin.measurements import measure
from ct_measure_plugin.viewer.docks.ring_artefact import RingArtefactDock
from ct_measure_plugin.viewer.docks.uniformity import UniformityDock
from ct_measure_plugin.viewer.layers import layer_of
from ct_measure_plugin.virtual_scanner import samples


@pytest.fixture
def rings(viewer_model):
    """The sample series with rings, shown."""
    volume = read_series(samples.folder("rings"))
    data, attributes, _ = layer_of(volume, "Rings")
    return viewer_model, viewer_model.add_image(data, **attributes), volume


def opened(kind, rings, qtbot):
    viewer, image, volume = rings
    dock = kind(viewer)
    qtbot.addWidget(dock)
    dock.choose(image)
    dock.measure_now()
    [answer] = dock.answers.answers()
    return viewer, dock, volume, answer


def as_layer(viewer, dock, name):
    """Choose a tab, press its button, and return the layer that comes."""
    dock.answers.tabs.setCurrentIndex(dock.answers.fields().index(name))
    assert not dock.answers.layer_button.isHidden()
    dock.answers.layer_button.click()
    return viewer.layers[-1]


def at(layer, y, x):
    """Return a flat layer's value at a place of the world."""
    row, column = np.rint(np.asarray(layer.world_to_data((y, x)))).astype(int)
    return float(layer.data[row, column])


def test_uniformity_needs_no_region_and_shows_the_radial_profile_first(rings, qtbot):
    viewer, dock, volume, answer = opened(UniformityDock, rings, qtbot)
    direct = measure("uniformity", volume)
    assert answer.result.cup_depth == direct.cup_depth
    assert dock.answers.fields()[:2] == ["radial_profile", "deviation_map"]
    assert {"edges", "cup_along_z", "deviation_along_z", "sd_along_z"} <= set(dock.answers.fields())
    assert len(answer.marks) == 8 * (2 + 4)
    layer = as_layer(viewer, dock, "deviation_map")
    ring = at(layer, 0.0, 10.25)  # a channel that reads low by 16 HU, seen through discs of 10 mm
    assert ring < at(layer, 0.0, 30.0) - 0.5
    assert at(layer, 38.0, 38.0) == 0.0  # beyond the field


def test_places_are_edited_in_the_form_and_drawn_anew(rings, qtbot):
    _, dock, _, _ = opened(UniformityDock, rings, qtbot)
    settings = dock.form.settings.model_copy(update={"edge_regions": 6, "edge_position": 0.6})
    dock.form.show(settings)
    dock.measure_now()
    [answer] = dock.answers.answers()
    assert answer.result.edges.x.tolist() == [0, 60, 120, 180, 240, 300]
    first = answer.marks[2]
    assert np.hypot(*first.center_mm) == pytest.approx(0.6 * 58.0, abs=0.1)


def test_rings_that_were_found_can_be_opened_as_a_layer(rings, qtbot):
    viewer, dock, _, answer = opened(RingArtefactDock, rings, qtbot)
    assert sorted(mark.radius_mm for mark in answer.marks) == pytest.approx(
        [10.25, 22.25, 38.25], abs=0.5
    )
    assert dock.answers.fields()[:2] == ["amplitude", "ring_map"]
    layer = as_layer(viewer, dock, "ring_map")
    peaks = [
        min(
            (at(layer, -r, 0.0) for r in np.arange(near - 1, near + 1.1, 0.25)),
            key=lambda v: -abs(v),
        )
        for near in (10.25, 22.25, 38.25)
    ]
    assert np.sign(peaks).tolist() == [-1, 1, -1]  # a channel of more gain reads low
    assert abs(at(layer, 0.0, 30.0)) < 0.5
    assert layer.metadata["unit"] == "HU"


def test_what_is_no_cylinder_is_told_in_the_dock(viewer_model, qtbot):
    data, attributes, _ = layer_of(read_series(samples.folder("standard")), "Rods")
    image = viewer_model.add_image(data, **attributes)
    dock = UniformityDock(viewer_model)
    qtbot.addWidget(dock)
    dock.choose(image)
    dock.measure_now()
    [answer] = dock.answers.answers()
    assert not answer.result
    assert "inserts" in answer.result.reason
    assert dock.answers.fields() == []
