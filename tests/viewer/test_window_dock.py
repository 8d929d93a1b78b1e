"""The HU window dock: sets, follows, remembers; on one layer or on all; never the data."""

from __future__ import annotations

import numpy as np
import pytest
from qtpy.QtWidgets import QInputDialog, QMessageBox

from ct_measure_plugin.physics.volume import Volume
from ct_measure_plugin.viewer import presets
from ct_measure_plugin.viewer.docks.window import ALL_CT, SELECTED, WindowDock
from ct_measure_plugin.viewer.layers import Asked, layer_of


@pytest.fixture
def preset_file(tmp_path, monkeypatch):
    file = tmp_path / "window_presets.json"
    monkeypatch.setattr(presets, "presets_file", lambda: file)
    return file


@pytest.fixture
def add(viewer_model):
    """Add a Volume's layer to the viewer."""

    def adding(volume, name="CT"):
        data, attributes, _ = layer_of(volume, name)
        return viewer_model.add_image(data, **attributes)

    return adding


@pytest.fixture
def dock(qtbot, viewer_model, preset_file):
    made = WindowDock(viewer_model)
    qtbot.addWidget(made)
    made.show()
    made.refresh_now()
    return made


def limits(layer):
    return tuple(float(limit) for limit in layer.contrast_limits)


def test_without_an_image_it_says_so(dock):
    assert "open a CT series" in dock.which.text()
    assert not dock.controls.isEnabled()
    dock.apply(0, 100, "LINEAR")
    assert dock.status.text() == "There is no image layer to window."


def test_it_shows_the_layer_s_window(dock, add, volume):
    add(volume)
    dock.refresh_now()
    assert dock.controls.present() == (40.0, 400.0, "LINEAR")
    assert dock.controls.centre.suffix() == " HU"
    assert dock.mapping.text() == "Contrast limits −160 to 239 HU: black to white."


@pytest.mark.parametrize(
    ("function", "ends"),
    [("LINEAR", (-160, 239)), ("LINEAR_EXACT", (-160, 240)), ("SIGMOID", (-760, 840))],
)
def test_choosing_a_function_keeps_centre_and_width(dock, add, volume, function, ends):
    layer = add(volume)
    dock.refresh_now()
    dock.controls.function.setCurrentIndex(dock.controls.function.findData(function))
    assert limits(layer) == ends
    assert dock.controls.present() == (40.0, 400.0, function)
    assert ("curve is in the colour map" in dock.mapping.text()) == (function == "SIGMOID")


def test_a_typed_number_sets_the_limits(dock, add, volume):
    layer = add(volume)
    dock.refresh_now()
    dock.controls.centre.setValue(100.0)
    dock.controls.width_box.setValue(51.0)
    assert limits(layer) == (74.5, 124.5)


def test_the_sliders_move_the_numbers(dock, add, volume):
    layer = add(volume)
    dock.refresh_now()
    dock.controls._centre_slider.setValue(-600)
    assert dock.controls.centre.value() == -600
    dock.controls._width_slider.setValue(80)
    assert dock.controls.width_box.value() == 1024  # 2 ** (80 / 8)
    assert limits(layer) == (-1112, -89)


def test_it_follows_limits_changed_elsewhere(dock, add, volume, qtbot):
    layer = add(volume)
    dock.refresh_now()
    layer.contrast_limits = (-100, 99)
    qtbot.waitUntil(lambda: dock.controls.present()[:2] == (0.0, 200.0), timeout=2000)
    layer.gamma = 0.8
    qtbot.waitUntil(lambda: "Gamma 0.8 bends" in dock.mapping.text(), timeout=2000)
    assert limits(layer) == (-100, 99)


def test_limits_dragged_under_a_sigmoid_are_its_window(dock, add, volume, qtbot):
    layer = add(volume)
    dock.refresh_now()
    dock.apply(40, 400, "SIGMOID")
    layer.contrast_limits = (-400, 400)
    qtbot.waitUntil(lambda: dock.controls.present() == (0.0, 200.0, "SIGMOID"), timeout=2000)


def test_a_hidden_dock_sleeps_and_wakes(dock, add, volume, qtbot):
    layer = add(volume)
    dock.refresh_now()
    dock.hide()
    layer.contrast_limits = (-100, 99)
    qtbot.wait(80)
    assert dock.controls.present()[:2] == (40.0, 400.0)
    dock.show()
    qtbot.waitUntil(lambda: dock.controls.present()[:2] == (0.0, 200.0), timeout=2000)


def test_selected_layers_only(dock, add, volume, viewer_model):
    one, other = add(volume, "one"), add(volume, "other")
    viewer_model.layers.selection = {one}
    dock.apply(0, 100, "LINEAR")
    assert limits(one) == (-50, 49)
    assert limits(other) == (-160, 239)
    assert dock.which.text() == "one"


def test_all_ct_layers_together_and_no_others(dock, add, volume, viewer_model, qtbot):
    one, other = add(volume, "one"), add(volume, "other")
    counts = add(Volume(np.ones((2, 9, 9)), spacing_mm=(1, 1, 1), unit="counts"), "counts")
    foreign = viewer_model.add_image(np.ones((2, 9, 9)), contrast_limits=(0, 5), name="foreign")
    dock.targets.setCurrentText(ALL_CT)
    dock.apply(0, 100, "LINEAR")
    assert [limits(layer) for layer in (one, other)] == [(-50, 49)] * 2
    assert limits(counts) == (1, 2)
    assert limits(foreign) == (0, 5)
    dock.session.answer(foreign, Asked(spacing_mm=(1, 1, 1), unit="HU"))
    dock.apply(0, 200, "LINEAR")
    assert limits(foreign) == (-100, 99)


def test_layers_that_differ_are_said_to(dock, add, volume):
    one, _other = add(volume, "one"), add(volume, "other")
    one.contrast_limits = (0, 10)
    dock.targets.setCurrentText(ALL_CT)
    dock.refresh_now()
    assert "layers differ" in dock.mapping.text()
    dock.targets.setCurrentText(SELECTED)
    dock.refresh_now()
    assert "layers differ" not in dock.mapping.text()


def test_the_header_s_own_windows_are_offered(dock, add, volume):
    layer = add(volume)
    dock.refresh_now()
    assert dock.presets.names()[:2] == ["SOFT", "BONE"]
    dock.presets.pick("BONE")
    assert limits(layer) == (-450, 1049)


def test_header_windows_go_when_their_series_does(dock, add, volume, viewer_model):
    add(volume)
    dock.refresh_now()
    viewer_model.layers.clear()
    viewer_model.add_image(np.ones((2, 9, 9)), contrast_limits=(0, 5))
    dock.refresh_now()
    assert "SOFT" not in dock.presets.names()
    assert dock.controls.centre.suffix() == ""


def test_a_preset_is_one_click(dock, add, volume):
    layer = add(volume)
    dock.presets.pick("Lung")
    assert limits(layer) == (-1350, 149)


def test_an_own_preset_is_saved_and_removed(dock, add, volume, monkeypatch, preset_file):
    add(volume)
    dock.apply(12, 34, "SIGMOID")
    monkeypatch.setattr(QInputDialog, "getText", lambda *_a, **_k: (" Mine ", True))
    dock.presets.ask_and_save()
    assert "Mine" in dock.presets.names()
    assert dock.status.text() == "Saved 'Mine'."
    assert '"SIGMOID"' in preset_file.read_text()
    dock.apply(0, 100, "LINEAR")
    dock.presets.pick("Mine")
    assert dock.controls.present() == (12.0, 34.0, "SIGMOID")
    assert dock.presets.remove_button.text() == "Remove"
    dock.presets.remove_button.click()
    assert "Mine" not in dock.presets.names()


def test_replacing_a_preset_asks_first(dock, add, volume, monkeypatch):
    add(volume)
    dock.refresh_now()
    answers = [QMessageBox.StandardButton.No, QMessageBox.StandardButton.Yes]
    monkeypatch.setattr(QInputDialog, "getText", lambda *_a, **_k: ("Lung", True))
    monkeypatch.setattr(QMessageBox, "question", lambda *_a: answers.pop(0))
    dock.presets.ask_and_save()
    assert not dock.presets.shelf.is_own("Lung")
    dock.presets.ask_and_save()
    assert dock.presets.shelf.is_own("Lung")
    dock.presets.pick("Lung")
    assert dock.presets.remove_button.text() == "Restore"


def test_a_preset_that_cannot_be_saved_is_said(dock, add, volume, preset_file):
    add(volume)
    dock.refresh_now()
    preset_file.mkdir()
    dock.presets.save("Mine")
    assert dock.status.text().startswith("The preset could not be saved")


@pytest.fixture
def drawn(dock, add, volume, viewer_model):
    """An image, and a square of 24 × 24 pixels on slice 2."""
    image = add(volume)
    shapes = viewer_model.add_shapes(
        ndim=3, scale=image.scale, translate=image.translate, units=image.units
    )
    square = np.array([[2, 8, 8], [2, 8, 32], [2, 32, 32], [2, 32, 8]])
    shapes.add_rectangles([square - [0, 0.5, 0.5]])
    dock.refresh_now()
    return image, shapes


def test_a_window_from_a_region_is_its_mean_and_spread(dock, drawn, volume):
    image, _shapes = drawn
    pixels = volume.hu[2, 8:32, 8:32].astype(float)
    dock.spread.setValue(2.0)
    dock.from_region.click()
    centre, width, _ = dock.controls.present()
    # the spin boxes show one decimal
    assert centre == pytest.approx(pixels.mean(), abs=0.051)
    assert width == pytest.approx(4 * pixels.std(ddof=1), abs=0.051)
    low, high = limits(image)
    assert high - low == pytest.approx(4 * pixels.std(ddof=1) - 1, rel=1e-9)
    assert dock.status.text().startswith("region 1: mean ")


def test_which_region_must_be_clear(dock, drawn, viewer_model):
    _image, shapes = drawn
    shapes.add_rectangles([shapes.data[0] + [1, 0, 0]])
    shapes.selected_data = set()
    dock.from_region.click()
    assert dock.status.text().startswith("Select one of the regions")
    shapes.selected_data = {1}
    dock.from_region.click()
    assert dock.status.text().startswith("region 2: mean ")
    shapes.data = []
    dock.from_region.click()
    assert dock.status.text().startswith("Draw a region")


def test_a_region_that_cannot_be_measured_says_why(dock, drawn):
    image, shapes = drawn
    before = limits(image)
    shapes.add_paths([np.array([[2, 8, 8], [2, 20, 20], [2, 20, 8]])], edge_width=0)
    shapes.selected_data = {1}
    dock.from_region.click()
    assert "greater than 0 to enclose pixels" in dock.status.text()
    assert limits(image) == before


def test_a_foreign_layer_in_pixels_must_be_asked_about_first(dock, viewer_model):
    viewer_model.add_image(np.ones((4, 30, 30)), contrast_limits=(0, 5))
    viewer_model.add_shapes([np.array([[8, 8], [20, 20]])], shape_type="rectangle")
    dock.refresh_now()
    dock.from_region.click()
    assert "unit of length" in dock.status.text()


def test_data_are_never_touched(dock, add, volume):
    before = volume.hu.copy()
    layer = add(volume)
    for name in dock.presets.names():
        dock.presets.pick(name)
    dock.apply(0, 100, "SIGMOID")
    assert layer.data is volume.hu
    assert np.array_equal(volume.hu, before)


def test_the_first_presets_have_keys(dock, add, volume):
    from qtpy.QtGui import QShortcut

    layer = add(volume)
    dock.refresh_now()
    keys = {short.key().toString(): short for short in dock.findChildren(QShortcut)}
    assert sorted(keys) == [f"Ctrl+Alt+{digit}" for digit in range(1, 10)]
    keys["Ctrl+Alt+2"].activated.emit()
    assert limits(layer) == (-450, 1049)  # BONE, the second in the list


def test_every_control_has_a_name_and_the_dock_is_narrow(dock, add, volume):
    from qtpy.QtWidgets import QAbstractSpinBox, QComboBox, QPushButton, QSlider, QTreeWidget

    add(volume)
    dock.refresh_now()
    for kind in (QAbstractSpinBox, QComboBox, QSlider, QTreeWidget):
        for control in dock.findChildren(kind):
            assert control.accessibleName(), control
    assert all(button.text() for button in dock.findChildren(QPushButton))
    assert dock.sizeHint().width() <= 320
    assert dock.body.parentWidget().minimumSizeHint().width() <= 320


def test_a_dock_that_is_gone_hears_nothing(qtbot, viewer_model, add, volume, preset_file):
    """The viewer holds no dock alive, and calls none that is dead."""
    import gc
    import weakref

    layer = add(volume)
    dock = WindowDock(viewer_model)
    dock.show()
    dock.refresh_now()
    dock.hide()
    gone = weakref.ref(dock)
    dock.deleteLater()
    qtbot.wait(20)
    del dock
    gc.collect()
    assert gone() is None
    layer.contrast_limits = (0, 10)
