"""Names, classes, numbers and answers in the features, beside what others keep there."""

from __future__ import annotations

import math

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.region_statistics import region_statistics
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.viewer.answer_columns import write_answers
from ct_measure_plugin.viewer.region_features import (
    checked_code,
    ids_on,
    set_column,
    tags_on,
)

SQUARE = np.array([[1, 5, 5], [1, 5, 25], [1, 25, 25], [1, 25, 5]], float)


def answer():
    image = np.random.default_rng(3).normal(40, 10, (20, 20))
    return region_statistics(image, spacing_mm=(0.5, 0.5))


@pytest.fixture
def shapes(viewer_model):
    return viewer_model.add_shapes([SQUARE, SQUARE + np.array([0, 3, 3])], shape_type="rectangle")


def test_answers_are_columns_that_other_plugins_can_read(shapes):
    shapes.features = {"foreign": [3.5, 4.5]}
    found = answer()
    told = []
    shapes.events.features.connect(lambda _event: told.append(1))
    assert write_answers(shapes, {0: found, 1: NotMeasured("too small", "draw")}, image="CT")
    assert told == [1]
    features = shapes.features
    assert features["ct_mean"].iloc[0] == found.mean.value
    assert features["ct_mean_u"].iloc[0] == found.mean.uncertainty
    assert math.isnan(features["ct_mean"].iloc[1])
    assert list(features["ct_not_measured"]) == ["", "too small"]
    assert list(features["ct_image"]) == ["CT", "CT"]
    assert list(features["foreign"]) == [3.5, 4.5]


def test_numbers_of_an_answer_that_is_gone_do_not_stay(shapes):
    """Moved off the image: its old mean must not stand beside the reason."""
    write_answers(shapes, {0: answer(), 1: answer()}, image="CT")
    write_answers(shapes, {0: answer(), 1: answer()}, image="second", suffix="_2")
    gone = NotMeasured("the region lies outside the volume", "move it")
    write_answers(shapes, {0: gone, 1: gone}, image="CT")
    features = shapes.features
    assert features[["ct_mean", "ct_mean_u", "ct_p10", "ct_n"]].isna().all().all()
    assert features["ct_mean_2"].notna().all()
    assert set(features["ct_not_measured"]) == {gone.reason}


def test_writing_the_same_again_touches_nothing(shapes):
    """Else every refresh would redraw the layer's text and call every listener."""
    found = {0: answer(), 1: NotMeasured("too small", "draw")}
    write_answers(shapes, found, image="CT")
    told = []
    shapes.events.features.connect(lambda _event: told.append(1))
    assert not write_answers(shapes, found, image="CT")
    assert told == []


def test_the_next_shape_keeps_the_class_but_not_the_name_or_the_numbers(shapes):
    set_column(shapes, "name", {0: "water", 1: "air"})
    set_column(shapes, "class", {1: "insert"})
    write_answers(shapes, {0: answer(), 1: answer()}, image="CT")
    shapes.add(SQUARE + np.array([0, 6, 6]), shape_type="rectangle")
    third = tags_on(shapes)[2]
    assert (third.name, third.group) == ("", "insert")
    assert math.isnan(shapes.features["ct_mean"].iloc[2])


def test_each_shape_keeps_its_number_and_a_copy_gets_its_own(shapes):
    assert ids_on(shapes) == [1, 2]
    shapes.selected_data = {0}
    shapes._copy_data()
    shapes._paste_data()
    assert ids_on(shapes) == [1, 2, 3]
    shapes.remove([0])
    assert ids_on(shapes) == [2, 3]


def test_while_a_shape_is_being_drawn_the_features_wait(shapes):
    shapes._feature_table.append(shapes._feature_table.defaults)  # as in the middle of a drawing
    before = len(shapes.features)
    set_column(shapes, "name", {0: "water"})
    assert len(shapes.features) == before
    assert "name" not in shapes.features


def test_labels_have_their_row_by_number(viewer_model):
    labels = viewer_model.add_labels(np.array([[0, 7, 7], [3, 3, 0]]))
    labels.features = {"index": [7], "foreign": ["kept"]}
    set_column(labels, "name", {3: "bone"}, keys=[3, 7])
    write_answers(labels, {3: answer(), 7: answer()}, image="CT", keys=[3, 7])
    features = labels.features.set_index("index")
    assert features.loc[3, "name"] == "bone"
    assert features.loc[7, "foreign"] == "kept"
    assert [one.name for one in tags_on(labels, [3, 7])] == ["bone", ""]
    assert labels.get_status((1, 0))["value"]  # napari itself still reads them


def test_labels_without_an_index_column_count_their_rows(viewer_model):
    labels = viewer_model.add_labels(np.array([[0, 1, 2]]))
    labels.features = {"name": ["", "one", "two"]}
    assert [one.name for one in tags_on(labels, [1, 2])] == ["one", "two"]
    set_column(labels, "class", {2: "x"}, keys=[1, 2])
    assert [one.group for one in tags_on(labels, [1, 2])] == ["", "x"]


@pytest.mark.parametrize("text", ["10200004", "SCT:", ":1", "SCT:" + "1" * 17, "A\\B:1"])
def test_a_code_needs_a_scheme_and_a_value(text):
    with pytest.raises(ArgumentError, match="must be scheme:value"):
        checked_code(text)


def test_no_code_is_no_code():
    assert checked_code("  ") == ""
