"""The regions' dock with a real window: mouse, brush, highlight, camera."""

from __future__ import annotations

import numpy as np
import pytest
from qtpy.QtCore import QPoint, Qt
from qtpy.QtWidgets import QScrollArea

from ct_measure_plugin.physics.regions import Disc
from ct_measure_plugin.physics.volume import Volume
from ct_measure_plugin.viewer.docks.fold import Fold
from ct_measure_plugin.viewer.docks.region_statistics import RegionStatisticsDock
from ct_measure_plugin.viewer.layers import layer_of
from ct_measure_plugin.viewer.region_drawing import new_labels_layer

pytestmark = pytest.mark.canvas


@pytest.fixture
def scene(make_napari_viewer, volume):
    viewer = make_napari_viewer(show=True)
    data, attributes, _ = layer_of(volume, "CT")
    image = viewer.add_image(data, **attributes)
    viewer.dims.set_point(0, volume.positions_mm[2])
    dock = RegionStatisticsDock(viewer)
    viewer.window.add_dock_widget(dock, name="Region statistics")
    dock.choose(image)
    yield viewer, image, dock
    dock.board.stop()


def pixel_of(viewer, y, x):
    """Where a world place (y, x) is on the canvas, in pixels."""
    canvas = viewer.window._qt_viewer.canvas.native
    camera = viewer.scene.camera
    middle = np.array([canvas.height(), canvas.width()]) / 2
    row, column = middle + (np.array([y, x]) - camera.center[-2:]) * camera.zoom
    return QPoint(round(column), round(row))


def bluer(picture):
    """How many pixels have more blue than red."""
    return np.count_nonzero(picture[..., 2].astype(int) > picture[..., 0].astype(int) + 20)


def drag(qtbot, viewer, start, end, steps=8):
    canvas = viewer.window._qt_viewer.canvas.native
    qtbot.mouseMove(canvas, start)
    qtbot.mousePress(canvas, Qt.MouseButton.LeftButton, pos=start)
    for step in range(1, steps + 1):
        at = start + (end - start) * step / steps
        qtbot.mouseMove(canvas, at)
        qtbot.wait(15)
    qtbot.mouseRelease(canvas, Qt.MouseButton.LeftButton, pos=end)


def test_a_dragged_region_is_followed_while_it_moves(scene, qtbot):
    """The mean changes before the button is let go, and is right after it was."""
    viewer, _, dock = scene
    dock.start_drawing()
    layer = dock.choice.chosen_layer()
    dock.do(lambda acts, _chosen: acts.add([Disc((0.0, 18.0), 4.0, z_mm=-15.0)]))
    qtbot.waitUntil(lambda: bool(dock.model.rows), timeout=5000)
    layer.mode = "select"
    layer.selected_data = {0}
    first = dock.model.rows[0].answer.mean.value
    seen = []
    dock.model.dataChanged.connect(lambda *_: seen.append(dock.model.rows[0].answer.mean.value))
    canvas = viewer.window._qt_viewer.canvas.native
    start, end = pixel_of(viewer, 0.0, 18.0), pixel_of(viewer, 0.0, 30.0)
    qtbot.mouseMove(canvas, start)
    qtbot.mousePress(canvas, Qt.MouseButton.LeftButton, pos=start)
    for step in range(1, 9):
        qtbot.mouseMove(canvas, start + (end - start) * step / 8)
        qtbot.wait(40)
    during = len(set(seen))
    qtbot.mouseRelease(canvas, Qt.MouseButton.LeftButton, pos=end)
    qtbot.waitUntil(lambda: dock.model.rows[0].complete, timeout=5000)
    assert during >= 2
    center = dock.board.drawn[0].region.center_mm
    assert center == pytest.approx((0.0, 30.0), abs=0.5)
    last = dock.model.rows[0].answer.mean.value
    assert last != first
    dock.refresh_now()
    assert dock.model.rows[0].answer.mean.value == last


def test_a_stroke_of_the_brush_is_followed(scene, qtbot, volume):
    viewer, _, dock = scene
    dock.start_drawing("labels", "paint")
    layer = dock.choice.chosen_layer()
    layer.brush_size = 6
    drag(qtbot, viewer, pixel_of(viewer, 0.0, 18.0), pixel_of(viewer, 0.0, 26.0))
    qtbot.waitUntil(lambda: len(dock.model.rows) == 1, timeout=5000)
    painted = layer.data == 1
    assert painted.any()
    qtbot.waitUntil(
        lambda: dock.model.rows[0].answer.n.value == np.count_nonzero(painted), timeout=5000
    )
    assert dock.model.rows[0].answer.mean.value == pytest.approx(volume.hu[painted].mean())
    layer.undo()
    qtbot.waitUntil(lambda: not dock.model.rows, timeout=5000)


def test_painting_a_large_map_never_holds_up_the_window(scene, qtbot, monkeypatch):
    """Looking through and measuring go into threads; the numbers come, and are right."""
    from ct_measure_plugin.viewer import labels, region_answers

    viewer, image, dock = scene
    monkeypatch.setattr(labels, "SOON", 0)
    monkeypatch.setattr(region_answers, "LONG", 0.0)
    layer = new_labels_layer(viewer, image)
    layer.data[1:5, 5:30, 10:40] = 3
    layer.refresh()
    dock.choose(regions=layer)
    qtbot.waitUntil(lambda: bool(dock.model.rows) and dock.model.rows[0].complete, timeout=10000)
    assert dock.model.rows[0].answer.n.value == np.count_nonzero(layer.data == 3)
    for step in range(6):
        layer.paint((2, 33, 10 + 4 * step), 3)
        qtbot.wait(20)
    assert dock.model.rows[0].answer  # the number before stays, paler, until the new one comes
    wanted = np.count_nonzero(layer.data == 3)
    qtbot.waitUntil(lambda: dock.model.rows[0].answer.n.value == wanted, timeout=10000)
    qtbot.waitUntil(lambda: dock.model.rows[0].complete, timeout=10000)


def test_a_chosen_row_lights_its_shape_up_and_brings_it_into_view(scene, qtbot, volume):
    viewer, _, dock = scene
    dock.start_drawing()
    layer = dock.choice.chosen_layer()
    places = [Disc((0.0, 18.0), 3.0, z_mm=-15.0), Disc((10.0, 38.0), 2.0, z_mm=-10.0)]
    dock.do(lambda acts, _chosen: acts.add(places))
    dock.refresh_now()
    layer.mode = "pan_zoom"
    layer.selected_data = set()
    viewer.layers.selection.active = viewer.layers["CT"]
    viewer.dims.set_point(0, -15.0)
    viewer.scene.camera.zoom = 60.0
    viewer.scene.camera.center = (0.0, 0.0, 18.0)
    dock.refresh_now()
    plain = viewer.screenshot(canvas_only=True, flash=False)
    dock.view.selectRow(1)
    assert viewer.dims.point[0] == -10.0
    assert viewer.scene.camera.center[-2:] == pytest.approx((10.0, 38.0))
    lit = viewer.screenshot(canvas_only=True, flash=False)
    layer.selected_data = set()
    dark = viewer.screenshot(canvas_only=True, flash=False)
    # napari's highlight is blue, the regions are amber and the image is grey
    assert bluer(lit) > 100 > bluer(dark)
    assert bluer(plain) < 100


def test_a_chosen_label_is_shown_alone_for_a_moment(scene, qtbot):
    viewer, image, dock = scene
    layer = new_labels_layer(viewer, image)
    layer.data[2, 5:15, 5:15] = 3
    layer.data[2, 20:30, 20:30] = 7
    layer.refresh()
    dock.choose(regions=layer)
    dock.refresh_now()
    dock.view.selectRow(1)
    assert layer.selected_label == 7
    assert layer.show_selected_label
    qtbot.waitUntil(lambda: not layer.show_selected_label, timeout=3000)
    layer.selected_label = 3
    assert dock.view.chosen() == [3]


def test_closing_and_opening_the_dock_again(scene, qtbot):
    """Hidden, it does nothing; shown, it is up to date; its layers may go meanwhile."""
    viewer, image, dock = scene
    dock.start_drawing()
    layer = dock.choice.chosen_layer()
    dock.do(lambda acts, _chosen: acts.add([Disc((0.0, 18.0), 4.0, z_mm=-15.0)]))
    qtbot.waitUntil(lambda: len(dock.model.rows) == 1, timeout=5000)
    dock.hide()
    layer.add(np.asarray(layer.data[0]) + np.array([0, 0, 9]), shape_type="ellipse")
    qtbot.wait(100)
    assert len(dock.model.rows) == 1
    dock.show()
    qtbot.waitUntil(lambda: len(dock.model.rows) == 2, timeout=5000)
    viewer.layers.remove(layer)
    qtbot.waitUntil(lambda: not dock.model.rows, timeout=5000)
    second = Volume(np.zeros((2, 30, 30)), (1.0, 1.0, 1.0))
    data, attributes, _ = layer_of(second, "other")
    viewer.add_image(data, **attributes)
    viewer.layers.remove(image)
    qtbot.waitUntil(lambda: dock.choice.chosen_images() != (image,), timeout=5000)


def test_the_dock_stays_narrow_and_the_window_its_size(scene, qtbot):
    viewer, _, dock = scene
    before = viewer.window._qt_window.size()
    for fold in dock.findChildren(Fold):
        fold.open(True)
    qtbot.wait(50)
    assert viewer.window._qt_window.size() == before
    assert dock.minimumSizeHint().width() <= 320
    content = dock.findChild(QScrollArea).widget()
    assert content.minimumSizeHint().width() <= 286  # what is left of 300 beside the scroll bar
