"""Any measurement in a dock: live, with its doubt, several layers at once, and kept as asked."""

from __future__ import annotations

import csv
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from ct_measure_plugin.measurements import DRAWN, find, measure
from ct_measure_plugin.physics.regions import Box
from ct_measure_plugin.physics.results import curves_of, pictures_of
from ct_measure_plugin.physics.tables import tables_of
from ct_measure_plugin.records import read_json
from ct_measure_plugin.viewer.demo import draw_regions
from ct_measure_plugin.viewer.docks.all_measurements import AllMeasurementsDock
from ct_measure_plugin.viewer.docks.mtf import MtfDock
from ct_measure_plugin.viewer.layers import layer_of
from ct_measure_plugin.viewer.shapes import new_regions_layer

for room in ("measurements", "physics"):
    sys.path.append(str(Path(__file__).parents[1] / room))
from examples import EXAMPLES  # noqa: E402


def open_volume(viewer, volume, name="CT 1"):
    data, attributes, _ = layer_of(volume, name)
    return viewer.add_image(data, **attributes)


@pytest.fixture
def edge(qtbot, viewer_model):
    """An MTF dock on the example's edge, its box drawn."""
    example = EXAMPLES["edge_mtf"]()
    image = open_volume(viewer_model, example.volume)
    layer = draw_regions(viewer_model, image, example.regions)
    dock = MtfDock(viewer_model)
    qtbot.addWidget(dock)
    dock.choose(image, regions=layer)
    dock.measure_now()
    return viewer_model, image, layer, dock, example


def shift(layer, by):
    layer.data = [np.asarray(one) + by for one in layer.data]


@pytest.mark.parametrize("name", DRAWN)
def test_every_measurement_is_shown_whatever_it_answers(name, qtbot, viewer_model):
    """Numbers, curves and pictures are found by type; no measurement is known by name."""
    example = EXAMPLES[name]()
    image = open_volume(viewer_model, example.volume)
    layer = draw_regions(viewer_model, image, example.regions)
    dock = AllMeasurementsDock(viewer_model)
    qtbot.addWidget(dock)
    dock.choose_measurement(name)
    dock.form.show(find(name).settings_type(**example.settings))
    dock.choose(image, regions=layer)
    dock.measure_now()
    answers = [one.result for one in dock.answers.answers()]
    assert all(answers), answers
    first = answers[0]
    curves = [n for n, c in curves_of(first).items() if len(c.x) > 1]
    found = [*curves[:1], *pictures_of(first), *curves[1:], *tables_of(first)]
    assert dock.answers.fields() == found
    for index in range(dock.answers.tabs.count()):
        dock.answers.tabs.setCurrentIndex(index)
        shown = [not part.isHidden() for part in (dock.answers.plot, dock.answers.picture,
                 dock.answers.rows)]  # fmt: skip
        assert sum(shown) == 1
        if shown[2]:
            table = tables_of(first)[dock.answers.fields()[index]]
            lines = ["\t".join(cells) for cells in (table.titles, *table.cells())]
            assert dock.answers.rows.as_text().splitlines() == lines
    column = find(name).columns[0]
    value, doubt = getattr(first, column).rounded()
    assert value.replace("-", "−") in dock.headline.texts()[0]
    assert doubt in dock.headline.texts()[0]
    # corners are float32
    direct = measure(name, example.volume, example.regions, **example.settings)
    direct = direct[0] if hasattr(direct, "parts") else direct
    assert getattr(first, column).value == pytest.approx(getattr(direct, column).value, rel=1e-4)


def test_the_large_numbers_are_those_of_python(edge):
    _, image, _, dock, _ = edge
    [answer] = dock.answers.answers()
    placement = dock.session.placement(image)
    [question] = dock._asked
    direct = measure("edge_mtf", placement.volume, question.regions)
    assert answer.result.f50 == direct.f50
    value, doubt = direct.f50.rounded()
    assert dock.headline.texts()[0] == f"f50 {value} ± {doubt} mm⁻¹"


def test_a_drag_is_followed_off_the_main_thread(edge, qtbot):
    """Thirty moves, faster than they are measured: the last one stands at the end."""
    import threading

    from ct_measure_plugin.viewer import asking

    _, _, layer, dock, _ = edge
    where = set()
    real = asking._measured

    def told(question, regions):
        where.add(threading.current_thread() is threading.main_thread())
        return real(question, regions)

    asking._measured = told
    try:
        dock.show()
        for _ in range(30):
            shift(layer, [0, 0, 0.05])
            qtbot.wait(5)
        qtbot.waitUntil(lambda: not dock._following.busy and not dock._timer.isActive())
        qtbot.waitUntil(lambda: not dock._following.busy)
    finally:
        asking._measured = real
    assert where == {False}
    [question], [answer] = dock._asked, dock.answers.answers()
    direct = measure("edge_mtf", question.volume, question.regions)
    assert answer.result.position == direct.position


def test_an_answer_to_another_measurement_is_dropped(edge, qtbot):
    _, _, _, dock, _ = edge
    late = dock._asked, dock.answers.answers()
    dock.sources.choose(regions=None)
    dock._asked = ()
    dock._show(())
    dock._take(late)
    assert dock.answers.answers() == ()


def test_a_refusal_stands_where_the_number_would(edge):
    _, _, layer, dock, _ = edge
    layer.data = [np.asarray(layer.data[0]) * [1, 0.05, 0.05] + [0, 3, 3]]
    dock.measure_now()
    assert dock.headline.texts() == []
    assert "Not measured: the box holds" in dock.headline.words.text()
    assert "Remedy: draw it larger." in dock.headline.words.text()
    assert not dock.answers.fields()


def test_without_a_region_it_says_what_to_draw(qtbot, viewer_model):
    dock = MtfDock(viewer_model)
    qtbot.addWidget(dock)
    dock.refresh_now()
    assert dock.headline.words.text() == "Open an image first, or tick one."
    open_volume(viewer_model, EXAMPLES["edge_mtf"]().volume)
    dock.reset_choices()
    dock.refresh_now()
    assert dock.headline.words.text() == "There is no region yet. Draw a rectangle."
    assert not dock.keeping.isEnabled()
    example = EXAMPLES["edge_mtf"]()
    draw_regions(viewer_model, viewer_model.layers[0], example.regions)
    dock.reset_choices()
    dock.refresh_now()  # measured beside this thread: nothing is shown yet
    assert dock.headline.words.text() == ""


def test_drawing_makes_a_layer_and_takes_the_measurement_s_tool(qtbot, viewer_model):
    image = open_volume(viewer_model, EXAMPLES["edge_mtf"]().volume)
    dock = MtfDock(viewer_model)
    qtbot.addWidget(dock)
    dock.sources.draw.click()
    layer = viewer_model.layers["Regions"]
    assert layer.mode == "add_rectangle"
    assert viewer_model.layers.selection.active is layer
    assert dock.sources.chosen_regions() is layer
    np.testing.assert_allclose(layer.scale, image.scale)


def test_cautions_are_told_in_words_warnings_first(qtbot, viewer_model):
    from ct_measure_plugin.physics.results import Caution

    example = EXAMPLES["edge_mtf"]()
    cautions = (
        Caution("simulated", "The image was simulated."),
        Caution("uneven-spacing", "The slices are uneven.", "Look at the gaps."),
    )
    image = open_volume(viewer_model, replace(example.volume, cautions=cautions))
    layer = draw_regions(viewer_model, image, example.regions)
    dock = MtfDock(viewer_model)
    qtbot.addWidget(dock)
    dock.choose(image, regions=layer)
    dock.measure_now()
    words = dock.headline.cautions.text()
    assert "Warning: The slices are uneven. Look at the gaps." in words
    assert words.index("uneven") < words.index("simulated")


def test_several_layers_share_the_region(edge):
    viewer, image, layer, dock, example = edge
    blurred = example.volume.hu.astype(float)
    blurred = (blurred + np.roll(blurred, 1, axis=2)) / 2
    second = open_volume(viewer, replace(example.volume, hu=blurred), "CT 2")
    dock.reset_choices()
    dock.choose(image, second, regions=layer)
    dock.measure_now()
    found = {answer.label: answer.result for answer in dock.answers.answers()}
    assert set(found) == {"CT 1", "CT 2"}
    assert found["CT 2"].f50.value < 0.95 * found["CT 1"].f50.value
    assert [trace.label for trace in dock.answers.plot.traces] == dock.answers.legend.texts()
    assert len(dock.keeping.records()) == 2


def test_a_frozen_curve_stays_while_the_live_one_moves(edge):
    _, _, layer, dock, _ = edge
    dock.answers.freeze_button.click()
    before = dock.answers.plot.traces[0].curve
    shift(layer, [0, 1, 2])
    dock.measure_now()
    live, frozen = dock.answers.plot.traces
    assert frozen.frozen
    assert frozen.curve is before
    assert live.curve is not before
    assert frozen.label.startswith("frozen 1: ")
    assert dock.answers.model.rowCount() == 2
    dock.answers.table.selectRow(1)
    assert dock.headline.label.text() == frozen.label
    dock.answers.clear_button.click()
    assert len(dock.answers.plot.traces) == 1
    assert len(dock.keeping.records()) == 1


def test_other_slices_are_asked_for(edge):
    _, _, _, dock, _ = edge
    layer = dock.sources.chosen_regions()
    layer.features = layer.features.drop(columns=["z_low_mm", "z_high_mm"])
    dock.measure_now()
    one = dock.answers.answers()[0].result.f50
    dock.sources.slices.setCurrentText("All slices")
    dock.measure_now()
    both = dock.answers.answers()[0].result.f50
    assert dock._asked[0].regions[0].z_mm is None
    assert both.uncertainty < one.uncertainty


def test_settings_change_the_answer_and_faults_are_told(edge):
    _, _, _, dock, _ = edge
    fitted = dock.answers.answers()[0].result
    dock.form._controls["method"].value = "conventional"
    dock.measure_now()
    assert dock.answers.answers()[0].result.method == "conventional"
    assert dock.answers.answers()[0].result.f50 != fitted.f50
    dock.form._controls["levels"]._line.value = "a third"
    assert "The settings before are used." in dock.headline.words.text()


def test_what_is_kept_is_what_was_asked(edge, tmp_path):
    _, _, _, dock, _ = edge
    [answer] = dock.answers.answers()
    [record] = read_json(dock.keeping.export_to(tmp_path / "mtf.json"))
    assert record.measurement == "edge_mtf"
    assert record.answer().f50 == answer.result.f50
    np.testing.assert_array_equal(record.answer().mtf.y, answer.result.mtf.y)
    with dock.keeping.export_to(tmp_path / "mtf.csv").open(encoding="utf-8-sig") as file:
        rows = list(csv.DictReader(file))
    assert {row["quantity"]: float(row["value"]) for row in rows}["f50"] == answer.result.f50.value


def test_the_table_is_copied(edge, qtbot):
    from qtpy.QtWidgets import QApplication

    _, _, _, dock, _ = edge
    dock.keeping.copy.emit()
    heading, line = QApplication.clipboard().text().splitlines()
    assert heading.startswith("Region\tf50 (mm⁻¹)")
    value, doubt = dock.answers.answers()[0].result.f50.rounded()
    assert line.split("\t")[1] == f"{value} ± {doubt}"


def test_the_found_edge_is_drawn_and_taken_away(edge):
    viewer, image, _, dock, _ = edge
    marks = viewer.layers["MTF: found"]
    ends = dock.answers.answers()[0].result.ends_mm
    spacing = dock.session.placement(image).volume.spacing_mm[1:]
    np.testing.assert_allclose(marks.data[0, 0, 1:] * spacing, ends[0], atol=1e-4)
    dock.on_image.setChecked(False)
    assert "MTF: found" not in viewer.layers
    dock.on_image.setChecked(True)
    assert "MTF: found" in viewer.layers
    dock.pause()
    assert "MTF: found" not in viewer.layers


def test_layers_that_go_are_let_go(edge):
    viewer, image, layer, dock, _ = edge
    viewer.layers.remove(layer)
    dock.reset_choices()
    dock.refresh_now()
    assert dock.answers.answers() == ()
    viewer.layers.remove(image)
    dock.reset_choices()
    dock.refresh_now()
    assert dock.headline.words.text() == "Open an image first, or tick one."


def test_a_layer_that_says_nothing_is_asked_about(qtbot, viewer_model):
    example = EXAMPLES["edge_mtf"]()
    image = viewer_model.add_image(example.volume.hu)
    layer = new_regions_layer(viewer_model, image)
    box: Box = example.regions[0]
    corners = np.asarray(box.vertices_mm) / 0.5
    layer.add(np.c_[np.zeros(4), corners], shape_type="rectangle")
    dock = MtfDock(viewer_model)
    qtbot.addWidget(dock)
    dock.choose(image, regions=layer)
    dock.refresh_now()
    assert not dock.questions.isHidden()
    assert "its pixel size be entered" in dock.headline.words.text()
    for axis, step in (("z", 2.0), ("y", 0.5), ("x", 0.5)):
        dock.questions._steps[axis].setValue(step)
    dock.measure_now()
    assert dock.headline.texts()[0].startswith("f50 ")
    codes = {caution.code for caution in dock.answers.answers()[0].result.cautions}
    assert {"hu-assumed", "spacing-assumed"} <= codes


@pytest.mark.canvas
@pytest.mark.parametrize("title", ["MTF", "HU window"])
def test_a_closed_dock_is_gone(make_napari_viewer, qtbot, title):
    """Nothing holds it: neither Qt, nor the viewer, nor a closure of its own."""
    import gc
    import weakref

    viewer = make_napari_viewer(show=True)
    open_volume(viewer, EXAMPLES["edge_mtf"]().volume)
    outer, dock = viewer.window.add_plugin_dock_widget("ct-measure-plugin", title)
    gone = weakref.ref(dock)
    qtbot.waitUntil(lambda: gone().awake, timeout=3000)
    viewer.window.remove_dock_widget(outer)
    del outer, dock

    def is_gone():
        gc.collect()
        return gone() is None

    qtbot.waitUntil(is_gone, timeout=20000)  # collecting a whole suite's heap takes its time


def test_a_volume_does_not_outlive_its_layer(qtbot, viewer_model):
    """A dock keeps answers by Volume, but of no Volume that it is not asked about."""
    import gc
    import weakref

    dock = MtfDock(viewer_model)
    qtbot.addWidget(dock)
    volume = EXAMPLES["edge_mtf"]().volume
    image = open_volume(viewer_model, volume)
    layer = draw_regions(viewer_model, image, EXAMPLES["edge_mtf"]().regions)
    dock.choose(image, regions=layer)
    dock.measure_now()
    dock.pause()
    gone = weakref.ref(volume.hu)
    viewer_model.layers.remove(image)
    dock.reset_choices()
    del volume, image
    viewer_model.add_image(np.zeros((3, 4, 5)))  # the viewer itself keeps the last active layer
    gc.collect()
    assert gone() is None


@pytest.mark.canvas
def test_in_a_real_window_the_box_is_dragged_and_the_number_follows(make_napari_viewer, qtbot):
    viewer = make_napari_viewer(show=True)
    viewer.window.resize(1280, 800)
    example = EXAMPLES["edge_mtf"]()
    image = open_volume(viewer, example.volume)
    layer = draw_regions(viewer, image, example.regions)
    _, dock = viewer.window.add_plugin_dock_widget("ct-measure-plugin", "MTF")
    dock.choose(image, regions=layer)
    qtbot.waitUntil(lambda: bool(dock.headline.texts()), timeout=10000)
    before = dock.answers.answers()[0].result.position.value
    shift(layer, [0, 0, 1.0])
    qtbot.waitUntil(
        lambda: abs(dock.answers.answers()[0].result.position.value - before) > 0.3, timeout=10000
    )
    qtbot.waitUntil(lambda: "MTF: found" in viewer.layers, timeout=5000)
    picture = viewer.screenshot(canvas_only=False, flash=False)
    assert picture.shape[:2] == (800, 1280)
    # the curve is there, in the theme's first line colour: some hundred pixels of it
    wanted = np.array([0x56, 0xB4, 0xE9])
    near = np.abs(picture[:, 980:, :3].astype(int) - wanted).max(axis=2) < 40
    assert near.sum() > 100
