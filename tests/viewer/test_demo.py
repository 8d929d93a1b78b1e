"""The demo's window: every dock of the manifest, filled, in a window that keeps its size."""

from __future__ import annotations

import numpy as np
import pytest
from npe2 import PluginManager

from ct_measure_plugin.dicom import read_series
from ct_measure_plugin.measurements import NAMES, find
from ct_measure_plugin.physics.regions import Box, Disc, Mask
from ct_measure_plugin.records import load_plan, write_json
from ct_measure_plugin.run import run_plan
from ct_measure_plugin.viewer import demo
from ct_measure_plugin.viewer.docks.window import WindowDock
from ct_measure_plugin.viewer.layers import layer_of
from ct_measure_plugin.viewer.session import Session
from ct_measure_plugin.virtual_scanner import samples


def test_regions_are_drawn_where_they_lie(viewer_model, volume):
    from ct_measure_plugin.viewer.shapes import drawn_on

    data, attributes, _ = layer_of(volume)
    image = viewer_model.add_image(data, **attributes)
    regions = [
        Disc((-4.0, 20.0), 5.0, z_mm=-12.5, name="plug"),
        Box((0.0, 20.0), (4.0, 6.0), 30.0, z_mm=(-20.0, -10.0), name="box"),
    ]
    layer = demo.draw_regions(viewer_model, image, regions)
    placement = Session.of(viewer_model).placement(image)
    assert placement.plane_of(viewer_model.dims.point) == 3
    plug, box = (one.region for one in drawn_on(layer, placement, viewer_model.dims.point))
    assert plug.kind == "disc"
    assert plug.center_mm == pytest.approx((-4.0, 20.0), abs=1e-5)  # corners are float32
    assert plug.radius_mm == pytest.approx(5.0, abs=1e-5)
    assert plug.z_mm == -12.5
    assert box.angle_deg == pytest.approx(30.0, abs=1e-4)
    assert box.z_mm == (-20.0, -10.0)
    assert layer.data[1][0][0] == 2  # drawn on the middle slice of its range
    assert [plug.name, box.name] == ["plug", "box"]


def test_a_mask_has_no_outline_to_draw(volume):
    from ct_measure_plugin.measurements import find, measure
    from ct_measure_plugin.records import Record

    mask = Mask(np.ones((40, 50), bool), (2.5, 0.7, 0.7), (-20, -14, 7), z_mm=-20)
    settings = find("region_statistics").settings_type()
    answer = measure("region_statistics", volume, mask)
    record = Record.of("region_statistics", settings, (mask,), volume, answer)
    assert demo.regions_of([record]) == []


@pytest.mark.canvas
def test_the_demo_fills_every_dock(make_napari_viewer, tmp_path, monkeypatch):
    folder = samples.folder("standard")
    plan = load_plan(samples.folder() / "demo_plan.yaml")
    records = run_plan(plan, read_series(folder))
    file = write_json(records, tmp_path / "records.json")
    viewer = make_napari_viewer(show=True)
    viewer.window.resize(1280, 800)
    monkeypatch.setattr("napari.Viewer", lambda **_: viewer)
    monkeypatch.setattr("napari.run", lambda: None)
    assert demo.main([str(folder), "--records", str(file)]) == 0

    titles = [w.display_name for w in PluginManager.instance().get_manifest(
        demo.PLUGIN).contributions.widgets]  # fmt: skip
    docks = list(viewer.window.dock_widgets)
    assert all(any(title in dock for dock in docks) for title in titles)
    session = Session.of(viewer)
    assert len(session.records) == len(records)
    for name in {record.measurement for record in records}:
        own = [record for record in records if record.measurement == name]
        drawn = viewer.layers[find(name).title]
        assert drawn.nshapes == len(demo.regions_of(own))
    measured = set(session.answers)
    assert measured <= set(NAMES)


def test_a_dock_of_the_demo_finds_what_the_record_says(qtbot, viewer_model):
    """The drawn regions, slices and all, give the recorded numbers back (corners are float32)."""
    from ct_measure_plugin.viewer.docks.all_measurements import AllMeasurementsDock

    volume = read_series(samples.folder("standard"))
    records = run_plan(load_plan(samples.folder() / "demo_plan.yaml"), volume)
    data, attributes, _ = layer_of(volume)
    image = viewer_model.add_image(data, **attributes)
    layers = demo.draw_records(viewer_model, image, records)
    dock = AllMeasurementsDock(viewer_model)
    qtbot.addWidget(dock)
    for name, layer in layers.items():
        demo.aim([dock], image, {name: layer}, records)
        dock.measure_now()
        kept = [record.answer() for record in records if record.measurement == name]
        found = [one.result for one in dock.answers.answers()]
        assert len(found) == len(kept)
        for one, two in zip(found, kept, strict=True):
            column = next(c for c in find(name).columns if getattr(two, c))  # measured here
            assert getattr(one, column).value == pytest.approx(getattr(two, column).value, rel=1e-4)


@pytest.mark.canvas
@pytest.mark.parametrize("theme", ["dark", "light"])
def test_the_docks_keep_the_window_s_size(make_napari_viewer, theme, qtbot):
    """On a small screen the window must not grow beyond it when a dock opens."""
    viewer = make_napari_viewer(show=True)
    viewer.theme = theme
    viewer.window.resize(1280, 800)
    viewer.open_sample("ct-measure-plugin", "enhanced")
    for inside in demo.add_docks(viewer):
        qtbot.waitUntil(lambda w=inside: w.width() > 0, timeout=2000)
        assert inside.minimumSizeHint().width() <= 320
    qtbot.wait(100)
    picture = viewer.screenshot(canvas_only=False, flash=False)
    assert picture.shape[:2] == (800, 1280)


@pytest.mark.canvas
def test_a_closed_dock_lets_go(make_napari_viewer, qtbot):
    viewer = make_napari_viewer(show=True)
    layer = viewer.add_image(np.zeros((3, 20, 20)), contrast_limits=(0, 5))
    outer, dock = viewer.window.add_plugin_dock_widget("ct-measure-plugin", "HU window")
    assert isinstance(dock, WindowDock)
    qtbot.waitUntil(lambda: dock.controls.present()[0] > 0, timeout=3000)
    shown = dock.controls.present()
    viewer.window.remove_dock_widget(outer)
    layer.contrast_limits = (0, 100)
    qtbot.wait(80)
    assert dock.controls.present() == shown
