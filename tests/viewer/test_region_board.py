"""Rows of regions on one image or several, and what of them stands in the features."""

from __future__ import annotations

import math
import threading

import numpy as np
import pytest

from ct_measure_plugin.measurements import find, measure
from ct_measure_plugin.physics.regions import Disc
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.volume import Volume
from ct_measure_plugin.viewer import region_board, region_source
from ct_measure_plugin.viewer.layers import layer_of
from ct_measure_plugin.viewer.region_board import RegionBoard
from ct_measure_plugin.viewer.region_features import set_column
from ct_measure_plugin.viewer.region_source import source_of
from ct_measure_plugin.viewer.session import Session
from ct_measure_plugin.viewer.shapes import new_regions_layer, shape_of

NAME = "region_statistics"


@pytest.fixture
def pair(volume):
    """Two images of one scan: noise of 10 HU shared, 2 HU apart, and a step of 5 HU between."""
    rng = np.random.default_rng(9)
    second = volume.hu + np.round(rng.normal(5, 2, volume.shape)).astype(np.int16)
    return volume, Volume(second, volume.spacing_mm, volume.origin_mm)


@pytest.fixture
def scene(viewer_model, pair):
    images = []
    for name, volume in zip(("standard", "sharp"), pair, strict=True):
        data, attributes, _ = layer_of(volume, name)
        images.append(viewer_model.add_image(data, **attributes))
    viewer_model.dims.set_point(0, -15.0)
    board = RegionBoard(Session.of(viewer_model), NAME)
    board.settings = find(NAME).settings_type()
    yield viewer_model, images, board
    board.stop()


def draw(scene, volume, *regions, k=2):
    viewer, images, board = scene
    layer = new_regions_layer(viewer, images[0])
    for region in regions:
        flat, kind = shape_of(region)
        step, origin = np.asarray(volume.spacing_mm[1:]), np.asarray(volume.origin_mm[1:])
        layer.add(np.c_[np.full(len(flat), k), (flat - origin) / step], shape_type=kind)
    board.source = source_of(layer, viewer)
    return layer


def test_one_image_gives_one_row_a_region(scene, pair):
    _, images, board = scene
    board.images = (images[0],)
    draw(scene, pair[0], Disc((0.0, 18.0), 4.0), Disc((0.0, 30.0), 4.0))
    assert board.look() == 0
    assert [row.name for row in board.rows] == ["region 1", "region 2"]
    assert [row.image for row in board.rows] == ["", ""]
    for row, drawn in zip(board.rows, board.drawn, strict=True):
        assert row.answer.mean == measure(NAME, pair[0], drawn.region).mean


def test_two_images_give_their_rows_and_the_difference(scene, pair):
    _, images, board = scene
    board.images = tuple(images)
    draw(scene, pair[0], Disc((0.0, 24.0), 6.0))
    board.look()
    one, two, difference = board.rows
    assert [row.image for row in board.rows] == ["standard", "sharp", "sharp − standard"]
    assert [row.mark for row in board.rows] == ["1", "2", "2 − 1"]
    assert two.answer.mean == measure(NAME, pair[1], board.drawn[0].region).mean
    assert difference.answer.mean.value == two.answer.mean.value - one.answer.mean.value
    apart = math.hypot(one.answer.mean.uncertainty, two.answer.mean.uncertainty)
    assert difference.answer.mean.uncertainty < apart / 3  # the noise is shared
    assert difference.difference
    assert not two.difference


def test_an_image_moved_by_hand_shares_no_pixels(scene, pair):
    """The same place in mm is another place in its voxels: no pixelwise difference."""
    _, images, board = scene
    images[1].translate = np.array(images[1].translate) + np.array([0, 0.35, 0])
    board.images = tuple(images)
    draw(scene, pair[0], Disc((0.0, 24.0), 6.0))
    board.look()
    one, two, difference = (row.answer for row in board.rows)
    apart = math.hypot(one.mean.uncertainty, two.mean.uncertainty)
    assert difference.mean.uncertainty == pytest.approx(apart)


def test_each_image_has_its_question_for_the_records(scene, pair):
    _, images, board = scene
    board.images = tuple(images)
    draw(scene, pair[0], Disc((0.0, 24.0), 6.0))
    board.look()
    questions = board.questions()
    assert [question[0] for question in questions] == [NAME, NAME]
    assert questions[1][1].hu is images[1].data
    assert len(questions[0][2]) == 1


def test_the_features_hold_the_answers_of_every_image(scene, pair):
    _, images, board = scene
    board.images = tuple(images)
    layer = draw(scene, pair[0], Disc((0.0, 24.0), 6.0))
    board.look()
    assert board.write_features()
    features = layer.features
    assert features["ct_mean"].iloc[0] == board.rows[0].answer.mean.value
    assert features["ct_mean_2"].iloc[0] == board.rows[1].answer.mean.value
    assert features["ct_image_2"].iloc[0] == "sharp"
    assert features["region_id"].iloc[0] == 1
    assert not board.write_features()


def test_features_of_many_regions_are_laid_out_in_a_thread(scene, pair, monkeypatch, qtbot):
    _, images, board = scene
    board.images = tuple(images)
    layer = draw(scene, pair[0], Disc((0.0, 18.0), 4.0), Disc((0.0, 30.0), 4.0))
    board.look()
    board.write_features()
    at_once = layer.features.copy()
    layer.features = at_once[["region_id"]]
    monkeypatch.setattr(region_board, "MANY_ROWS", 0)
    here, where = threading.get_ident(), []
    real = region_source.with_answers
    monkeypatch.setattr(
        region_source,
        "with_answers",
        lambda *args, **words: (where.append(threading.get_ident()), real(*args, **words))[1],
    )
    assert not board.write_features()
    qtbot.waitUntil(lambda: "ct_mean_2" in layer.features, timeout=5000)
    assert here not in where
    assert set(layer.features.columns) == set(at_once.columns)
    assert layer.features[list(at_once.columns)].equals(at_once)


@pytest.mark.parametrize("what", ["features", "rows", "nothing"])
def test_features_laid_out_for_what_was_there_before_are_dropped(
    scene, pair, monkeypatch, qtbot, what
):
    _, images, board = scene
    board.images = (images[0],)
    layer = draw(scene, pair[0], Disc((0.0, 18.0), 4.0), Disc((0.0, 30.0), 4.0))
    board.look()
    monkeypatch.setattr(region_board, "MANY_ROWS", 0)
    board.write_features()
    if what == "features":
        set_column(layer, "class", {0: "water"})
    elif what == "rows":
        layer.data = [np.add(one, (0, 1, 0)) for one in layer.data]
        board.look()
    qtbot.waitUntil(lambda: not board._columns.busy, timeout=5000)
    assert ("ct_mean" in layer.features) == (what == "nothing")


def test_the_features_wait_for_what_is_still_to_come(scene, pair):
    _, images, board = scene
    board.images = (images[0],)
    layer = draw(scene, pair[0], Disc((0.0, 24.0), 6.0))
    assert board.look(seconds=0.0) == 1
    assert not board.rows[0].complete
    assert not board.write_features()
    assert "ct_mean" not in layer.features


def test_the_chosen_region_comes_first(scene, pair, monkeypatch):
    _, images, board = scene
    board.images = (images[0],)
    draw(scene, pair[0], *(Disc((0.0, 14.0 + i), 4.0) for i in range(6)))
    asked = []
    monkeypatch.setattr(board.answers, "find", lambda asks, _seconds: asked.extend(asks) or 0)
    board.look(first={4}, seconds=1.0)
    assert asked[0].region == board.drawn[4].region
    assert len(asked) == 6


def test_what_is_missing_is_said(scene, pair):
    viewer, images, board = scene
    board.look()
    assert board.said == "Open an image first."
    board.images = (images[0],)
    board.look()
    assert board.said.startswith("Press Draw")
    board.source = source_of(viewer.add_labels(np.zeros(pair[0].shape, int)), viewer)
    board.source.layer.scale = images[0].scale
    board.look()
    assert "No label is painted" in board.said
    flat = viewer.add_image(np.zeros((4, 20, 20)))
    board.images = (images[0], flat)
    board.look()
    assert board.said.startswith(f"{flat.name}: ")
    assert "pixel size" in board.said
    assert board.rows == ()


def test_what_is_no_region_says_so_in_its_row(scene, pair):
    _, images, board = scene
    board.images = tuple(images)
    layer = draw(scene, pair[0])
    layer.add(np.array([[2, 5, 5], [2, 20, 20], [2, 20, 5], [2, 5, 20]]), shape_type="polygon")
    board.look()
    assert len(board.rows) == 3
    assert all(isinstance(row.answer, NotMeasured) for row in board.rows)
    assert "must not cross itself" in board.rows[0].answer.reason
    assert board.rows[0].complete


def test_labels_are_rows_with_their_names(scene, pair):
    viewer, images, board = scene
    data = np.zeros(pair[0].shape, np.uint8)
    data[1:4, 5:15, 10:20] = 3
    data[2:5, 20:30, 10:40] = 7
    layer = viewer.add_labels(
        data, scale=images[0].scale, translate=images[0].translate, units="mm"
    )
    set_column(layer, "name", {7: "bone"}, keys=[3, 7])
    board.images, board.source = tuple(images), source_of(layer, viewer)
    board.look()
    assert [row.name for row in board.rows[::3]] == ["label 3", "bone"]
    assert board.rows[0].answer.mean.value == pytest.approx(pair[0].hu[data == 3].mean())
    board.write_features()
    stored = layer.features.set_index("index")
    assert stored.loc[7, "ct_n"] == np.count_nonzero(data == 7)


def test_a_region_that_moves_faster_than_it_is_measured_keeps_its_last_number(scene, pair):
    """Marked as such, and gone as soon as the new one is known."""
    _, images, board = scene
    board.images = (images[0],)
    layer = draw(scene, pair[0], Disc((0.0, 18.0), 4.0))
    board.look()
    before = board.rows[0].answer
    layer.data = [np.asarray(layer.data[0]) + np.array([0.0, 0.0, 9.0])]
    assert board.look(seconds=0.0) == 1
    [row] = board.rows
    assert row.answer is before
    assert row.stale
    assert not row.complete
    board.look()
    [row] = board.rows
    assert row.answer.mean.value != before.mean.value
    assert not row.stale


def test_ten_thousand_labels_are_rows_that_are_looked_up_not_made_anew(viewer_model):
    """A stroke then costs the labels it touches, and a look at the others."""
    rng = np.random.default_rng(2)
    hu = np.round(rng.normal(40, 10, (1, 400, 400))).astype(np.int16)
    data, attributes, _ = layer_of(Volume(hu, (1.0, 1.0, 1.0)), "many")
    image = viewer_model.add_image(data, **attributes)
    numbers = np.arange(10_000, dtype=np.uint16).reshape(100, 100)
    labels = np.kron(numbers, np.ones((4, 4), np.uint16))[None]
    layer = viewer_model.add_labels(labels, scale=image.scale, translate=image.translate)
    board = RegionBoard(Session.of(viewer_model), NAME)
    board.settings = find(NAME).settings_type()
    board.images, board.source = (image,), source_of(layer, viewer_model)
    board.look(seconds=0.0)
    assert len(board.rows) == 9_999
    before = board.rows
    layer.events.paint.connect(board.source.note)
    layer.data_setitem((np.array([0]), np.array([4]), np.array([4])), 7)
    board.look(first={101, 7}, seconds=0.05)
    changed = [row.index for row, old in zip(board.rows, before, strict=True) if row is not old]
    assert set(changed) >= {7, 101}
    # 0.05 s measure some hundreds on any machine; rows made anew would be all 9,999
    assert len(changed) < len(before) / 2
    n = {row.index: row.answer.n.value for row in board.rows if row.index in (7, 101)}
    assert n == {7: 17.0, 101: 15.0}
    board.stop()
