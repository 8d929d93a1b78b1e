"""What was deleted, moved or added comes back as it was, whatever happened meanwhile."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.viewer.outlines import Outline, add_outlines, outlines_of, put
from ct_measure_plugin.viewer.region_features import ids_on, set_column
from ct_measure_plugin.viewer.undo import Undo, change_outlines, change_voxels

SQUARE = np.array([[1, 5, 5], [1, 5, 25], [1, 25, 25], [1, 25, 5]], float)


@pytest.fixture
def shapes(viewer_model):
    layer = viewer_model.add_shapes(
        [SQUARE, SQUARE + 1, SQUARE + 2], shape_type=["rectangle", "ellipse", "polygon"],
        edge_color=["red", "lime", "blue"], edge_width=[1, 2, 3], face_color="transparent",
    )  # fmt: skip
    layer.features = {"name": ["a", "b", "c"], "foreign": [1.5, 2.5, 3.5]}
    return layer


def look(layer):
    """Everything a user sees of a layer's shapes, by name."""
    return {
        layer.features["name"].iloc[i]: (
            np.asarray(layer.data[i]).tolist(),
            str(layer.shape_type[i]),
            layer.edge_color[i].tolist(),
            float(layer.edge_width[i]),
            float(layer.features["foreign"].iloc[i]),
        )
        for i in range(layer.nshapes)
    }


def delete(layer, indices):
    return change_outlines(layer, "delete", indices, lambda: layer.remove(list(indices)) or ())


def test_a_deleted_shape_comes_back_with_its_looks_and_features(shapes):
    before = look(shapes)
    undo = Undo()
    undo.done(delete(shapes, [0, 1]))
    assert list(look(shapes)) == ["c"]
    assert undo.undo()
    assert look(shapes) == before
    assert undo.redo()
    assert list(look(shapes)) == ["c"]
    assert undo.undo()
    assert look(shapes) == before


def test_what_was_drawn_meanwhile_stays(shapes):
    undo = Undo()
    undo.done(delete(shapes, [1]))
    shapes.add(SQUARE + 7, shape_type="rectangle")
    set_column(shapes, "name", {2: "new"})
    shapes.remove([0])
    undo.undo()
    assert sorted(look(shapes)) == ["b", "c", "new"]


def test_a_move_goes_back_and_keeps_the_name_given_since(shapes):
    undo = Undo()

    def act():
        [(number, one)] = outlines_of(shapes, [1]).items()
        put(shapes, {number: Outline(one.corners + 5.0, one.kind)})
        return ()

    undo.done(change_outlines(shapes, "move", [1], act))
    set_column(shapes, "name", {1: "renamed"})
    assert np.allclose(shapes.data[1], SQUARE + 6)
    undo.undo()
    assert np.allclose(shapes.data[1], SQUARE + 1)
    assert str(shapes.shape_type[1]) == "ellipse"
    assert shapes.features["name"].iloc[1] == "renamed"
    undo.redo()
    assert np.allclose(shapes.data[1], SQUARE + 6)


def test_added_copies_go_and_the_originals_stay(shapes):
    before = look(shapes)
    undo = Undo()
    copies = [
        Outline(one.corners + 9.0, one.kind, one.looks, {**one.features, "name": f"{k} 2"})
        for k, one in outlines_of(shapes, [0, 2]).items()
    ]
    undo.done(change_outlines(shapes, "copy", [0, 2], lambda: add_outlines(shapes, copies)))
    assert shapes.nshapes == 5
    assert len(set(ids_on(shapes))) == 5
    undo.undo()
    assert look(shapes) == before


def test_the_selection_survives(shapes):
    shapes.selected_data = {0, 2}
    undo = Undo()
    undo.done(delete(shapes, [1]))
    assert shapes.selected_data == {0, 1}
    undo.undo()
    chosen = {shapes.features["name"].iloc[i] for i in shapes.selected_data}
    assert chosen == {"a", "c"}


def test_points_come_back_with_their_size(viewer_model):
    points = viewer_model.add_points(
        np.array([[1.0, 2, 3], [4, 5, 6], [7, 8, 9]]), size=[3, 5, 7], face_color=["red"] * 3
    )
    points.features = {"name": ["a", "b", "c"]}
    undo = Undo()
    undo.done(change_outlines(points, "delete", [1], lambda: points.remove([1]) or ()))
    assert list(points.features["name"]) == ["a", "c"]
    undo.undo()
    assert dict(zip(points.features["name"], points.size, strict=True)) == {"a": 3, "c": 7, "b": 5}
    assert points.data[2].tolist() == [4, 5, 6]
    assert points.face_color[2].tolist() == [1, 0, 0, 1]


def test_voxels_get_their_labels_back(viewer_model):
    data = np.zeros((4, 20, 20), np.uint16)
    data[1:3, 5:9, 5:9] = 3
    data[2, 8:12, 8:12] = 5
    layer = viewer_model.add_labels(data.copy())
    where = np.nonzero(data == 3)
    undo = Undo()
    undo.done(change_voxels(layer, "delete label 3", where, 0))
    assert not (layer.data == 3).any()
    undo.undo()
    assert np.array_equal(layer.data, data)
    undo.redo()
    assert not (layer.data == 3).any()


def test_words_say_what_is_next(shapes):
    undo = Undo()
    told = []
    undo.changed.connect(lambda: told.append(1))
    assert (undo.next_undo, undo.next_redo) == ("", "")
    assert not undo.undo()
    undo.done(delete(shapes, [0]))
    assert (undo.next_undo, undo.next_redo) == ("delete", "")
    undo.undo()
    assert (undo.next_undo, undo.next_redo) == ("", "delete")
    undo.done(delete(shapes, [0]))
    assert (undo.next_undo, undo.next_redo) == ("delete", "")
    assert len(told) == 3


def test_steps_of_a_layer_that_is_gone_are_forgotten(viewer_model):
    import gc

    layer = viewer_model.add_shapes([SQUARE], shape_type="rectangle")
    undo = Undo()
    undo.done(delete(layer, [0]))
    viewer_model.layers.clear()
    del layer
    gc.collect()
    assert undo.next_undo in ("", "delete")  # napari may keep a removed layer alive for a while
    undo.undo()  # and then nothing breaks
