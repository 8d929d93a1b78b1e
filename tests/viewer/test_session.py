"""The shared state of a viewer's docks."""

from __future__ import annotations

import gc
import weakref

import numpy as np
import pytest
from napari.components import ViewerModel
from napari.utils._proxies import PublicOnlyProxy

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.viewer.layers import Asked
from ct_measure_plugin.viewer.session import Session


def test_one_session_a_viewer_whatever_hands_it_over(viewer_model):
    session = Session.of(viewer_model)
    assert Session.of(PublicOnlyProxy(viewer_model)) is session
    assert Session.of(ViewerModel()) is not session


def test_a_session_dies_with_its_viewer():
    viewer = ViewerModel()
    session = Session.of(viewer)
    gone = weakref.ref(session)
    del viewer, session
    gc.collect()
    assert gone() is None


def test_what_was_entered_reaches_everyone(viewer_model):
    layer = viewer_model.add_image(np.zeros((3, 4, 5)))
    session = Session.of(viewer_model)
    heard = []
    session.asked_changed.connect(heard.append)
    with pytest.raises(ArgumentError, match="pixel size be entered"):
        session.placement(layer)
    session.answer(layer, Asked(spacing_mm=(3, 0.5, 0.5)))
    session.answer(layer, Asked(spacing_mm=(3, 0.5, 0.5)))
    assert heard == [layer]
    assert session.placement(layer).volume.spacing_mm == (3, 0.5, 0.5)


def test_chosen_images_follow_the_selection(viewer_model):
    session = Session.of(viewer_model)
    low = viewer_model.add_image(np.zeros((3, 4, 5)))
    high = viewer_model.add_image(np.zeros((3, 4, 5)))
    viewer_model.add_image(np.zeros((4, 5, 3)), rgb=True)
    shapes = viewer_model.add_shapes()
    assert session.images() == (high, low)
    viewer_model.layers.selection = {shapes}
    assert session.chosen_images() == (high,)
    viewer_model.layers.selection = {low, shapes}
    assert session.chosen_images() == (low,)


def test_answers_and_records_are_told(viewer_model):
    session = Session.of(viewer_model)
    heard = []
    session.answers_changed.connect(lambda name, answers: heard.append((name, answers)))
    session.record_added.connect(heard.append)
    session.logbook_changed.connect(heard.append)
    session.show_answers("region_statistics", ["a"])
    session.keep("record")
    session.logbook = "book"
    session.logbook = "book"
    assert heard == [("region_statistics", ("a",)), "record", "book"]
    assert session.answers == {"region_statistics": ("a",)}


def test_a_placement_is_the_same_until_something_changes(viewer_model):
    """Docks keep answers by Volume; another time step must be another Volume."""
    deep = np.arange(2 * 3 * 4 * 5).reshape(2, 3, 4, 5)
    layer = viewer_model.add_image(deep, units="mm", rgb=False)
    session = Session.of(viewer_model)
    first = session.placement(layer)
    assert session.placement(layer) is first
    viewer_model.dims.set_current_step(1, 2)
    assert session.placement(layer) is first  # another slice of the same volume
    viewer_model.dims.set_current_step(0, 1)
    second = session.placement(layer)
    assert second is not first
    assert np.array_equal(second.volume.hu, deep[1])
    for change in (
        lambda: setattr(layer, "scale", (1, 2, 1, 1)),
        lambda: setattr(layer, "data", deep + 1),
        lambda: setattr(layer, "translate", (0, 5, 0, 0)),
        lambda: session.answer(layer, Asked(unit="1/cm")),
        lambda: setattr(layer, "name", "another"),
    ):
        before = session.placement(layer)
        change()
        assert session.placement(layer) is not before


def test_a_placement_does_not_outlive_its_layer(viewer_model):
    """Nor does one of a layer outside the viewer, whose going nobody tells."""
    layer = viewer_model.add_image(np.zeros((3, 4, 5)), units="mm")
    session = Session.of(viewer_model)
    session.placement(layer)
    gone = weakref.ref(layer)
    viewer_model.layers.clear()
    session.placement(layer)
    del layer
    viewer_model.add_image(np.zeros((3, 4, 5)))  # the viewer itself keeps the last active layer
    gc.collect()
    assert gone() is None
