"""The line profile's dock: a path is drawn, measured with its width, and follows its corners."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import ndtr

from ct_measure_plugin.physics.volume import Volume
from ct_measure_plugin.viewer.docks.line_profile import LineProfileDock
from ct_measure_plugin.viewer.layers import layer_of


@pytest.fixture
def dock(qtbot, viewer_model):
    """A dock on an edge of 0.8 mm across columns, at x 10.0 mm."""
    x = np.arange(120) * 0.5 - 20.0
    hu = np.tile(1000 * ndtr((x - 10.0) / 0.8), (2, 80, 1))
    volume = Volume(np.rint(hu).astype(np.int16), (2.0, 0.5, 0.5), origin_mm=(0.0, -5.0, -20.0))
    data, attributes, _ = layer_of(volume, "CT")
    viewer_model.add_image(data, **attributes)
    made = LineProfileDock(viewer_model)
    qtbot.addWidget(made)
    return made


def draw(dock, corners):
    layer = dock.sources.chosen_regions()
    layer.add([np.array([(0, *corner) for corner in corners])], shape_type="path", edge_width=4)
    return layer


def test_a_path_is_one_of_the_tools_and_is_measured_as_wide_as_it_is_drawn(dock):
    [path] = [one for one in dock.sources.draw.menu().actions() if one.text() == "Path"]
    path.trigger()
    layer = dock.sources.chosen_regions()
    assert str(layer.mode) == "add_polyline"
    draw(dock, [(40, 30), (40, 80), (60, 80)])  # along row 40 over the edge at column 60, then down
    dock.measure_now()
    [answer] = dock.answers.answers()
    assert answer.result.length.value == pytest.approx(25 + 10)
    assert answer.result.edge_width.value == pytest.approx(2.563103 * 0.8, rel=0.01)
    assert answer.result.middle.value == pytest.approx(15.0, abs=0.02)
    assert answer.result.sd is not None  # several lines were averaged


def test_a_moved_corner_is_followed(dock):
    dock.sources.draw.menu().actions()[0].trigger()
    layer = draw(dock, [(40, 30), (40, 80), (60, 80)])
    dock.measure_now()
    layer.data = [np.array([(0, 40, 30), (0, 40, 80), (0, 70, 80)])]
    dock.measure_now()
    [answer] = dock.answers.answers()
    assert answer.result.length.value == pytest.approx(25 + 15)


def test_a_path_too_sharp_for_its_width_says_so(dock):
    dock.sources.draw.menu().actions()[0].trigger()
    draw(dock, [(40, 30), (40, 55), (41, 55), (41, 80)])
    dock.measure_now()
    assert "turns too sharply for a width of 2 mm" in dock.headline.words.text()
