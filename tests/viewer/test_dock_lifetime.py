"""A closed dock is gone at once, in the main thread, and nothing calls it any more.

Objects in reference cycles wait for Python's collector, which runs in whichever thread happens to
fill it up. Widgets that a worker's thread collects take the process down: Qt deletes widgets in the
main thread alone.
"""

from __future__ import annotations

import gc
import importlib
import weakref

import numpy as np
import pytest
from qtpy.QtCore import QTimer
from qtpy.QtWidgets import QApplication, QWidget

from ct_measure_plugin.physics.regions import Disc
from ct_measure_plugin.viewer.docks.dock import Dock
from ct_measure_plugin.viewer.docks.region_statistics import RegionStatisticsDock
from ct_measure_plugin.viewer.layers import layer_of
from ct_measure_plugin.viewer.region_drawing import new_labels_layer
from ct_measure_plugin.viewer.shapes import new_regions_layer

DOCKS = (
    "all_measurements:AllMeasurementsDock",
    "ct_number_line:CtNumberLineDock",
    "line_profile:LineProfileDock",
    "mtf:MtfDock",
    "noise_power:NoisePowerDock",
    "region_statistics:RegionStatisticsDock",
    "ring_artefact:RingArtefactDock",
    "slice_profile:SliceProfileDock",
    "uniformity:UniformityDock",
    "window:WindowDock",
)


@pytest.fixture
def uncollected():
    """Python's collector stands still: what goes, goes because nothing holds it."""
    gc.collect()
    gc.disable()
    yield
    gc.enable()


@pytest.fixture
def scene(viewer_model, volume):
    data, attributes, _ = layer_of(volume, "CT")
    image = viewer_model.add_image(data, **attributes)
    viewer_model.dims.set_point(0, volume.positions_mm[2])
    layer = new_regions_layer(viewer_model, image)
    layer.add(np.array([[2, 10, 10], [2, 10, 30], [2, 30, 30], [2, 30, 10]]), shape_type="ellipse")
    return viewer_model, image, layer


@pytest.mark.parametrize("name", DOCKS)
def test_a_dock_that_nobody_holds_is_gone_at_once(qtbot, scene, uncollected, name):
    viewer, _, _ = scene
    module, _, kind = name.partition(":")
    room = importlib.import_module(f"ct_measure_plugin.viewer.docks.{module}")
    dock = getattr(room, kind)(viewer)
    dock.show()
    dock.refresh_now()
    QApplication.processEvents()
    dock.hide()
    gone = weakref.ref(dock)
    del dock
    assert gone() is None


def test_a_part_that_holds_its_dock_would_be_noticed(qtbot, viewer_model, uncollected):
    """The canary of the test above."""

    class Holding(Dock):
        def __init__(self, viewer):
            super().__init__(viewer)
            self.part = QWidget(self)
            self.part.do = self.refresh

    dock = Holding(viewer_model)
    gone = weakref.ref(dock)
    del dock
    assert gone() is not None
    gone().part.do = None


@pytest.mark.parametrize("kind", ["shapes", "labels", "points"])
def test_no_layer_calls_a_regions_dock_that_is_gone(qtbot, scene, uncollected, kind):
    viewer, image, layer = scene
    if kind == "labels":
        layer = new_labels_layer(viewer, image)
        layer.data[2, 10:20, 10:20] = 1
    elif kind == "points":
        layer = viewer.add_points([[2, 20, 20]], size=12, scale=image.scale, units=image.units)
    before = {name: len(emitter.callbacks) for name, emitter in layer.events.emitters.items()}
    pixels = len(image.events.data.callbacks)
    dock = RegionStatisticsDock(viewer)
    dock.show()
    dock.choose(image, layer)
    dock.refresh_now()
    dock._row_chosen()
    assert len(layer.events.set_data.callbacks) > before["set_data"]
    dock.hide()
    gone = weakref.ref(dock)
    del dock
    assert gone() is None
    layer.refresh()  # napari lets go of dead callbacks when it meets them
    layer.features = layer.features
    for name in ("set_data", "features", "data"):
        layer.events.emitters[name]()
        assert len(layer.events.emitters[name].callbacks) == before[name]
    image.events.data()
    assert len(image.events.data.callbacks) == pixels


@pytest.mark.canvas
def test_a_regions_dock_that_napari_closes_is_gone(make_napari_viewer, qtbot, volume):
    viewer = make_napari_viewer(show=True)
    data, attributes, _ = layer_of(volume, "CT")
    image = viewer.add_image(data, **attributes)
    outer, dock = viewer.window.add_plugin_dock_widget("ct-measure-plugin", "Region statistics")
    layer = new_regions_layer(viewer, image)
    dock.choose(image, layer)
    dock.acts.add([Disc((0.0, 24.0), 6.0, z_mm=-15.0, name="water")])
    board = dock.board
    qtbot.waitUntil(lambda: bool(board.rows and board.rows[0].answer), timeout=5000)
    dock.view.choose([0])
    gone, timers = weakref.ref(dock), [weakref.ref(one) for one in dock.findChildren(QTimer)]
    viewer.window.remove_dock_widget(outer)
    del outer, dock

    def is_gone():
        gc.collect()  # napari's own frame around it may wait for the collector
        return gone() is None and not any(one() for one in timers)

    qtbot.waitUntil(is_gone, timeout=20000)
    layer.data = [np.add(one, (0, 1, 1)) for one in layer.data]
    viewer.dims.set_point(0, volume.positions_mm[1])
