"""The dock shows what Python measures, follows what is drawn, and survives what users do."""

from __future__ import annotations

import csv
from dataclasses import replace

import numpy as np
import pytest
from qtpy.QtCore import Qt
from qtpy.QtWidgets import QApplication

from ct_measure_plugin.measurements import measure
from ct_measure_plugin.physics.regions import Disc
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.records import Logbook, read_json
from ct_measure_plugin.viewer.docks.region_statistics import RegionStatisticsDock
from ct_measure_plugin.viewer.layers import layer_of
from ct_measure_plugin.viewer.shapes import new_regions_layer, rename, shape_of

Z = -15.0  # slice 2 of the volume that conftest makes


def corners_of(region, volume, k=2):
    """A region's corners in voxels of the volume, on one slice."""
    flat, kind = shape_of(region)
    step, origin = np.asarray(volume.spacing_mm[1:]), np.asarray(volume.origin_mm[1:])
    return np.c_[np.full(len(flat), k), (flat - origin) / step], kind


@pytest.fixture
def scene(qtbot, viewer_model, volume):
    data, attributes, _ = layer_of(volume, "CT")
    image = viewer_model.add_image(data, **attributes)
    layer = new_regions_layer(viewer_model, image)
    viewer_model.dims.set_point(0, Z)
    dock = RegionStatisticsDock(viewer_model)
    qtbot.addWidget(dock)
    dock.choose(image, layer)
    yield viewer_model, image, layer, dock
    dock.board.stop()


def draw(layer, volume, region, name="", k=2):
    corners, kind = corners_of(region, volume, k)
    layer.add(corners, shape_type=kind)
    if name:
        rename(layer, layer.nshapes - 1, name)


def test_the_table_shows_the_number_that_python_gives(scene, volume):
    _, _, layer, dock = scene
    draw(layer, volume, Disc((0.0, 24.0), 6.0), "water")
    dock.refresh_now()
    [row] = dock.model.rows
    [drawn] = dock.board.drawn
    direct = measure("region_statistics", volume, drawn.region)
    assert row.answer.mean == direct.mean
    assert row.name == "water"
    assert dock.model.columns[:3] == ("name", "class", "mean")
    assert dock.model.heading(2) == "Mean (HU)"
    value, doubt = direct.mean.rounded()
    assert dock.model.text(0, 2) == f"{value} ± {doubt}"


def test_moving_a_region_changes_its_row_only(scene, volume):
    _, _, layer, dock = scene
    for x in (18.0, 30.0):
        draw(layer, volume, Disc((0.0, x), 4.0))
    dock.refresh_now()
    before = [row.answer for row in dock.model.rows]
    moved = [np.asarray(d) for d in layer.data]
    moved[1] = moved[1] + [0, 3, 0]
    layer.data = moved
    dock.refresh_now()
    after = [row.answer for row in dock.model.rows]
    assert after[0] is before[0]
    assert after[1].mean.value != before[1].mean.value


def test_a_pasted_shape_is_followed(scene, volume, qtbot):
    """napari emits no data event for a paste; the dock must not depend on one."""
    _, _, layer, dock = scene
    dock.show()
    draw(layer, volume, Disc((0.0, 24.0), 6.0))
    layer.selected_data = {0}
    layer._copy_data()
    layer._paste_data()
    qtbot.waitUntil(lambda: len(dock.model.rows) == 2, timeout=3000)


def test_rows_and_shapes_are_linked_both_ways(scene, volume):
    viewer, _, layer, dock = scene
    draw(layer, volume, Disc((0.0, 18.0), 4.0), k=1)
    draw(layer, volume, Disc((0.0, 30.0), 4.0), k=4)
    dock.refresh_now()
    dock.view.selectRow(1)
    assert layer.selected_data == {1}
    assert viewer.layers.selection.active is layer
    assert round(viewer.dims.point[0], 6) == volume.positions_mm[4]
    layer.selected_data = {0}
    assert dock.view.chosen() == [0]
    assert round(viewer.dims.point[0], 6) == volume.positions_mm[4]  # the viewer leads here


def column_of(dock, name):
    return dock.model.columns.index(name)


def test_names_classes_and_codes_are_edited_in_the_list(scene, volume):
    _, _, layer, dock = scene
    draw(layer, volume, Disc((0.0, 18.0), 4.0))
    draw(layer, volume, Disc((0.0, 30.0), 4.0))
    dock.model.want(dock.model.wanted, codes=True)
    dock.refresh_now()
    for name, text in (("name", "spleen"), ("class", "organ"), ("code", "SCT:78961009")):
        cell = dock.model.index(0, column_of(dock, name))
        assert dock.model.flags(cell) & Qt.ItemFlag.ItemIsEditable
        assert dock.model.setData(cell, f" {text} ")
        assert list(layer.features[name]) == [text, ""]
        dock.refresh_now()
        assert dock.model.text(0, column_of(dock, name)) == text
    assert dock.board.drawn[0].region.group == "organ"
    number = dock.model.index(0, column_of(dock, "mean"))
    assert not dock.model.flags(number) & Qt.ItemFlag.ItemIsEditable


def test_a_class_is_given_to_all_the_chosen_and_a_name_to_one(scene, volume):
    _, _, layer, dock = scene
    for x in (14.0, 22.0, 30.0):
        draw(layer, volume, Disc((0.0, x), 3.0))
    dock.refresh_now()
    layer.selected_data = {0, 2}
    dock.model.setData(dock.model.index(2, 1), "rod")
    assert list(layer.features["class"]) == ["rod", "", "rod"]
    dock.model.setData(dock.model.index(2, 0), "third")
    assert list(layer.features["name"]) == ["", "", "third"]


def test_a_code_that_is_none_is_refused_below_the_list(scene, volume):
    _, _, layer, dock = scene
    draw(layer, volume, Disc((0.0, 18.0), 4.0))
    dock.model.want(dock.model.wanted, codes=True)
    dock.refresh_now()
    dock.model.setData(dock.model.index(0, column_of(dock, "code")), "78961009")
    assert "must be scheme:value" in dock.message.text()
    assert "code" not in layer.features or list(layer.features["code"]) == [""]


def test_what_cannot_be_measured_says_so_in_its_row(scene, volume):
    _, _, layer, dock = scene
    layer.add(np.array([[2, 5, 5], [2, 20, 20], [2, 20, 5], [2, 5, 20]]), shape_type="polygon")
    draw(layer, volume, Disc((300.0, 300.0), 4.0))
    draw(layer, volume, Disc((0.0, 24.0), 0.4))
    dock.refresh_now()
    texts = [dock.model.text(i, dock.model.lead) for i in range(3)]
    assert "must not cross itself" in texts[0]
    assert "outside the volume" in texts[1]
    assert "at least 9 are needed" in texts[2]
    assert all(isinstance(row.answer, NotMeasured) for row in dock.model.rows)


def test_the_copy_is_a_table_of_numbers_with_units(scene, volume):
    """A spreadsheet takes unrounded numbers, the uncertainty in a column of its own."""
    _, _, layer, dock = scene
    draw(layer, volume, Disc((0.0, 24.0), 6.0), "water")
    layer.add(np.array([[2, 5, 5], [2, 20, 20], [2, 20, 5], [2, 5, 20]]), shape_type="polygon")
    dock.refresh_now()
    dock.view.copy()
    head, line, refused = (one.split("\t") for one in QApplication.clipboard().text().splitlines())
    assert head[:6] == ["Region", "Class", "Mean (HU)", "u(Mean (HU))", "SD (HU)", "u(SD (HU))"]
    mean = dock.model.rows[0].answer.mean
    assert (line[0], float(line[2]), float(line[3])) == ("water", mean.value, mean.uncertainty)
    assert refused[2].startswith("not measured: ")
    assert len(head) == len(line) == len(refused)


def test_what_is_exported_is_what_is_shown(scene, volume, tmp_path):
    _, _, layer, dock = scene
    draw(layer, volume, Disc((0.0, 24.0), 6.0), "water")
    dock.refresh_now()
    shown = dock.model.rows[0].answer
    [record] = read_json(dock.keeping.export_to(tmp_path / "r.json"))
    assert record.answer().mean == shown.mean
    with dock.keeping.export_to(tmp_path / "r.csv").open(encoding="utf-8-sig") as stream:
        rows = {row["quantity"]: row for row in csv.DictReader(stream)}
    assert float(rows["mean"]["value"]) == shown.mean.value
    page = dock.keeping.report_to(tmp_path / "p.html").read_text(encoding="utf-8")
    assert f">{shown.mean.rounded()[0]}<" in page
    with Logbook(tmp_path / "b.sqlite") as book:
        assert dock.keeping.record_in(book) == 1
        assert book.find()[0].answer().mean == shown.mean
    assert len(dock.session.records) == 1


def test_a_foreign_layer_is_asked_about_and_the_result_says_so(qtbot, viewer_model):
    image = viewer_model.add_image(np.random.default_rng(1).normal(50, 5, (3, 64, 64)))
    layer = new_regions_layer(viewer_model, image)
    layer.add(np.array([[0, 20, 20], [0, 20, 40], [0, 40, 40], [0, 40, 20]]), shape_type="ellipse")
    dock = RegionStatisticsDock(viewer_model)
    qtbot.addWidget(dock)
    dock.choose(image, layer)
    dock.refresh_now()
    assert not dock.model.rows
    assert "pixel size" in dock.message.text()
    assert not dock.questions.isHidden()
    for axis, step in zip("zyx", (2.0, 0.5, 0.5), strict=True):
        dock.questions._steps[axis].setValue(step)
    dock.refresh_now()
    [row] = dock.model.rows
    assert row.answer.area.value == pytest.approx(np.pi * 100 * 0.25, rel=1e-5)
    codes = {caution.code for caution in row.answer.cautions}
    assert {"spacing-assumed", "hu-assumed"} <= codes


def test_layers_may_go_at_any_time(scene, volume):
    viewer, image, layer, dock = scene
    draw(layer, volume, Disc((0.0, 24.0), 6.0))
    dock.refresh_now()
    viewer.layers.remove(layer)
    dock.reset_choices()
    dock.refresh_now()
    assert not dock.model.rows
    viewer.layers.remove(image)
    dock.reset_choices()
    dock.refresh_now()
    assert "Open an image first" in dock.message.text()


def test_a_hidden_dock_does_nothing(scene, volume, qtbot):
    _, _, layer, dock = scene
    dock.hide()
    draw(layer, volume, Disc((0.0, 24.0), 6.0))
    qtbot.wait(120)
    assert not dock.model.rows
    dock.show()
    qtbot.waitUntil(lambda: len(dock.model.rows) == 1, timeout=3000)


@pytest.mark.canvas
def test_a_real_drag_is_followed(make_napari_viewer, qtbot, volume):
    """Mouse events on a real canvas: draw an ellipse by dragging, see its row appear."""
    viewer = make_napari_viewer(show=True)
    data, attributes, _ = layer_of(volume, "CT")
    image = viewer.add_image(data, **attributes)
    dock = RegionStatisticsDock(viewer)
    viewer.window.add_dock_widget(dock, name="Region statistics")
    dock.choose(image)
    dock.start_drawing()
    layer = dock.choice.chosen_layer()
    assert str(layer.mode) == "add_ellipse"
    canvas = viewer.window._qt_viewer.canvas.native
    centre = canvas.rect().center()
    qtbot.mousePress(canvas, Qt.MouseButton.LeftButton, pos=centre)
    for step in range(1, 9):
        qtbot.mouseMove(canvas, centre + type(centre)(step * 12, step * 10))
        qtbot.wait(20)
    qtbot.mouseRelease(canvas, Qt.MouseButton.LeftButton, pos=centre + type(centre)(96, 80))
    qtbot.waitUntil(lambda: len(dock.model.rows) == 1, timeout=5000)
    assert layer.nshapes == 1
    assert dock.model.rows[0].answer, str(dock.model.rows[0].answer)


@pytest.mark.parametrize("coverage", ["area", "center"])
def test_a_threshold_gives_the_number_that_a_script_gives(scene, volume, coverage):
    """Border pixels within the range count by their share here too, unless told otherwise."""
    _, _, layer, dock = scene
    disc = Disc((0.3, 24.2), 6.1, z_mm=Z, name="tissue")
    draw(layer, volume, disc, "tissue")
    dock.form.show(dock.form.settings.model_copy(update={"coverage": coverage}))
    dock.refresh_now()
    whole = dock.board.answer(0)
    dock.acts.count([0], 35.0, 60.0)
    dock.refresh_now()
    shown = dock.board.answer(0)
    [drawn] = dock.board.drawn
    region = replace(drawn.region, values=(35.0, 60.0))
    asked = measure("region_statistics", volume, region, coverage=coverage)
    assert shown.mean == asked.mean
    assert (shown.sd, shown.n, shown.area) == (asked.sd, asked.n, asked.area)
    assert shown.n.value < whole.n.value
    assert shown.minimum.value >= 35.0
    if coverage == "area":  # as meant, before napari stored its corners as float32; a pixel whose
        # centre lies on the border, though, is in or out by that rounding
        meant = measure("region_statistics", volume, replace(disc, values=(35.0, 60.0)))
        assert shown.mean.value == pytest.approx(meant.mean.value, abs=1e-3)
