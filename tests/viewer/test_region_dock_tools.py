"""What the dock's fields and buttons do: typed numbers, copies, undo, curves, several images."""

from __future__ import annotations

import math

import numpy as np
import pytest

from ct_measure_plugin.physics.regions import Box, Disc, Ellipsoid
from ct_measure_plugin.physics.volume import Volume
from ct_measure_plugin.viewer.docks.region_statistics import RegionStatisticsDock
from ct_measure_plugin.viewer.layers import layer_of
from ct_measure_plugin.viewer.shapes import new_regions_layer

MM = 1e-4  # float32 corners below 100 mm


@pytest.fixture
def scene(qtbot, viewer_model, volume):
    data, attributes, _ = layer_of(volume, "CT")
    image = viewer_model.add_image(data, **attributes)
    layer = new_regions_layer(viewer_model, image)
    viewer_model.dims.set_point(0, volume.positions_mm[2])
    dock = RegionStatisticsDock(viewer_model)
    qtbot.addWidget(dock)
    dock.choose(image, layer)
    yield viewer_model, image, layer, dock
    dock.board.stop()


def regions(dock):
    dock.refresh_now()
    return [one.region for one in dock.board.drawn]


def add(dock, *made):
    dock.do(lambda acts, _chosen: acts.add(made))
    dock.refresh_now()


def press(widget, text):
    from qtpy.QtWidgets import QPushButton

    [found] = [one for one in widget.findChildren(QPushButton) if one.text() == text]
    found.click()


def test_a_disc_typed_in_mm_is_added_where_it_was_typed(scene, volume):
    _, _, layer, dock = scene
    dock.typing.y.setValue(1.5)
    dock.typing.x.setValue(23.0)
    dock.typing.width.setValue(9.0)
    press(dock.typing, "Add")
    [found] = regions(dock)
    assert isinstance(found, Disc)
    assert found.center_mm == pytest.approx((1.5, 23.0), abs=MM)
    assert found.radius_mm == pytest.approx(4.5, abs=MM)
    assert found.z_mm == volume.positions_mm[2]
    assert layer.selected_data == {0}
    assert dock.view.chosen() == [0]


def test_the_fields_show_what_is_chosen_and_reshape_it(scene):
    _, _, layer, dock = scene
    add(
        dock, Disc((0.0, 18.0), 4.0, z_mm=-15.0, name="a"), Box((2.0, 30.0), (6.0, 9.0), z_mm=-15.0)
    )
    layer.selected_data = {1}
    assert dock.typing.kind.currentData() == "box"
    assert dock.typing.height.value() == pytest.approx(6.0, abs=0.01)
    layer.selected_data = {0}
    assert dock.typing.kind.currentData() == "disc"
    dock.typing.width.setValue(5.0)
    press(dock.typing, "Reshape")
    found = regions(dock)[0]
    assert found.radius_mm == pytest.approx(2.5, abs=MM)
    assert found.name == "a"
    dock.doing.undo_button.click()
    assert regions(dock)[0].radius_mm == pytest.approx(4.0, abs=MM)


def test_reshaping_needs_one_chosen_region(scene):
    _, _, _, dock = scene
    add(dock, Disc((0.0, 18.0), 4.0, z_mm=-15.0), Disc((0.0, 30.0), 4.0, z_mm=-15.0))
    press(dock.typing, "Reshape")
    assert "must be one, chosen in the list" in dock.message.text()


def test_slices_and_values_are_set_for_the_chosen(scene, volume):
    _, _, _, dock = scene
    add(dock, Disc((0.0, 24.0), 5.0, z_mm=-15.0))
    typing = dock.typing
    typing.over.setCurrentText("a range of slices")
    typing.first.setValue(1)
    typing.last.setValue(4)
    press(typing.over.parentWidget(), "Set")
    assert regions(dock)[0].z_mm == (volume.positions_mm[1], volume.positions_mm[4])
    typing.swept.setChecked(True)
    press(typing.over.parentWidget(), "Set")
    [found] = regions(dock)
    assert isinstance(found, Ellipsoid)
    assert found.z_radius_mm == 5.0
    typing.over.setCurrentText("all slices")
    press(typing.over.parentWidget(), "Set")
    assert regions(dock)[0].z_mm is None
    typing.low.setText("35")
    typing.high.setText("")
    press(typing.low.parentWidget(), "Set")
    assert regions(dock)[0].values == (35.0, math.inf)
    assert dock.board.rows[0].answer.minimum.value >= 35


def test_curves_along_z_appear_with_a_range_of_slices(scene):
    _, _, _, dock = scene
    add(dock, Disc((0.0, 24.0), 5.0, z_mm=-15.0))
    assert dock.plots.field == "histogram"
    assert [dock.plots.tabs.tabText(i) for i in range(dock.plots.tabs.count())] == ["Histogram"]
    dock.do(lambda acts, chosen: acts.reach_slices(chosen, 0, 5))
    dock.refresh_now()
    tabs = [dock.plots.tabs.tabText(i) for i in range(dock.plots.tabs.count())]
    assert tabs == ["Histogram", "Slice mean", "Slice SD"]
    dock.plots.tabs.setCurrentIndex(1)
    [trace] = dock.plots.plot.traces
    assert trace.curve is dock.board.rows[0].answer.slice_mean
    assert len(trace.curve.x) == 6


def test_the_curves_are_those_of_the_chosen(scene):
    _, _, layer, dock = scene
    add(dock, *(Disc((0.0, 14.0 + 8 * i), 3.0, z_mm=-15.0, name=f"r{i}") for i in range(3)))
    layer.selected_data = {0, 2}
    assert [trace.label for trace in dock.plots.plot.traces] == ["r0", "r2"]
    layer.selected_data = {1}
    assert [trace.label for trace in dock.plots.plot.traces] == ["r1"]


def test_buttons_of_arranging_make_copies_that_undo_takes_back(scene, volume):
    _, _, _, dock = scene
    add(dock, Disc((-6.0, 14.0), 2.0, z_mm=-15.0))
    arranging = dock.arranging
    arranging.rows.setValue(2)
    arranging.columns.setValue(3)
    arranging.step_y.setValue(9.0)
    arranging.step_x.setValue(8.0)
    press(arranging, "Array")
    assert len(regions(dock)) == 6
    assert dock.doing.undo_button.toolTip() == "Undo: array 1 region"
    dock.doing.undo_button.click()
    assert len(regions(dock)) == 1
    assert dock.doing.redo_button.isEnabled()
    press(arranging, "Image's middle")
    assert (arranging.ring_y.value(), arranging.ring_x.value()) == pytest.approx(
        dock.acts.middle(), abs=0.006
    )
    arranging.places.setValue(4)
    press(arranging, "Ring")
    assert len(regions(dock)) == 4
    dock.doing.undo_button.click()
    arranging.first.setValue(0)
    arranging.last.setValue(5)
    press(arranging, "Copy to slices")
    assert sorted(one.z_mm for one in regions(dock)) == list(volume.positions_mm)
    dock.doing.undo_button.click()
    press(arranging, "Mirror")
    assert len(regions(dock)) == 2


def test_painting_as_labels_makes_a_layer_that_can_be_measured(scene):
    viewer, _, _, dock = scene
    add(dock, Disc((0.0, 24.0), 5.0, z_mm=-15.0, name="a", group="g"))
    press(dock.arranging, "Paint")
    [labels] = [one for one in viewer.layers if type(one).__name__ == "Labels"]
    dock.reset_choices()
    dock.choose(regions=labels)
    dock.refresh_now()
    [row] = dock.board.rows
    assert (row.name, row.group) == ("a", "g")
    press(dock.arranging, "Array")
    assert "must hold shapes or points" in dock.message.text()
    dock.view.choose({1})
    dock.doing.delete_button.click()
    dock.refresh_now()
    assert dock.board.rows == ()
    dock.doing.undo_button.click()
    dock.refresh_now()
    assert len(dock.board.rows) == 1


def test_two_images_are_ticked_and_compared(scene, volume):
    viewer, image, _, dock = scene
    second = Volume(volume.hu + np.int16(7), volume.spacing_mm, volume.origin_mm)
    data, attributes, _ = layer_of(second, "second")
    other = viewer.add_image(data, **attributes)
    dock.reset_choices()
    add(dock, Disc((0.0, 24.0), 5.0, z_mm=-15.0))
    assert len(dock.board.rows) == 1
    from qtpy.QtCore import Qt

    [item] = dock.choice.images.findItems("second", Qt.MatchFlag.MatchExactly)
    item.setCheckState(Qt.CheckState.Checked)
    assert dock.choice.chosen_images() == (image, other)
    dock.refresh_now()
    assert [row.mark for row in dock.board.rows] == ["1", "2", "2 − 1"]
    assert dock.board.rows[2].answer.mean.value == pytest.approx(7.0)
    texts = [dock.choice.images.item(i).text() for i in range(2)]
    assert texts == ["2: second", "1: CT"]
    records = dock.keeping.records()
    assert len(records) == 2


def test_points_and_labels_are_drawn_on_layers_of_their_own(scene):
    _, image, _, dock = scene
    dock.start_drawing("points", "add")
    points = dock.choice.chosen_layer()
    assert str(points.mode) == "add"
    points.add([2, 20, 25])
    dock.refresh_now()
    assert dock.board.rows[0].answer.area.value == pytest.approx(
        math.pi * (10 * 0.7) ** 2, rel=1e-5
    )
    dock.start_drawing("labels", "paint")
    labels = dock.choice.chosen_layer()
    assert labels.data.shape == image.data.shape
    dock.start_drawing("shapes", "add_rectangle")
    assert type(dock.choice.chosen_layer()).__name__ == "Shapes"


def test_answers_are_in_the_features_once_the_region_rests(scene, qtbot):
    _, _, layer, dock = scene
    dock.show()
    add(dock, Disc((0.0, 24.0), 5.0, z_mm=-15.0))
    qtbot.waitUntil(lambda: "ct_mean" in layer.features, timeout=3000)
    assert layer.features["ct_mean"].iloc[0] == dock.board.rows[0].answer.mean.value


def test_a_moving_regions_old_numbers_never_reach_the_features(scene, qtbot):
    """Moved again before it rested: the features get the answer of where it is."""
    _, _, layer, dock = scene
    dock.show()
    add(dock, Disc((0.0, 18.0), 4.0, z_mm=-15.0))
    for _step in range(8):
        layer.data = [np.asarray(layer.data[0]) + np.array([0, 0, 1])]
        qtbot.wait(20)
    qtbot.waitUntil(lambda: "ct_mean" in layer.features, timeout=3000)
    dock.refresh_now()
    assert layer.features["ct_mean"].iloc[0] == dock.board.rows[0].answer.mean.value
    assert dock.board.drawn[0].region.center_mm[1] == pytest.approx(18.0 + 8 * 0.7, abs=1e-3)


def test_what_was_opened_or_refused_is_told_below_the_list(scene, tmp_path):
    _, _, layer, dock = scene
    add(dock, Disc((0.0, 24.0), 5.0, z_mm=-15.0, name="a"))
    path = tmp_path / "a.regions.json"
    assert dock.files.save_regions(str(path))
    assert "Written to a.regions.json." in dock.message.text()
    assert dock.files.open_regions(str(path))
    assert "1 regions opened." in dock.message.text()
    assert layer.nshapes == 2
    path.write_text("{}")
    assert not dock.files.open_regions(str(path))
    assert "format" in dock.message.text()
    assert not dock.files.open_regions(str(tmp_path / "none.json"))
    assert "cannot be read" in dock.message.text()
    assert not dock.files.save_segmentation(str(tmp_path / "s.dcm"))
    assert "must be labels" in dock.message.text()
