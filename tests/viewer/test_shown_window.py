"""A layer shows the window asked for: on paper, and on the canvas grey by grey."""

from __future__ import annotations

import numpy as np
import pytest
from napari.layers import Image

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.windowing import FUNCTIONS, windowed
from ct_measure_plugin.viewer.shown_window import is_sigmoid, show_window, shown_window

RAMP = np.arange(-1000, 1000, 4, dtype=np.int16)


@pytest.fixture
def layer():
    return Image(np.tile(RAMP, (60, 1)), rgb=False, contrast_limits=(0, 1))


def test_limits_of_each_function(layer):
    show_window(layer, 40, 400, "LINEAR")
    assert tuple(layer.contrast_limits) == (-160, 239)
    show_window(layer, 40, 400, "LINEAR_EXACT")
    assert tuple(layer.contrast_limits) == (-160, 240)
    show_window(layer, 40, 400, "SIGMOID")
    assert tuple(layer.contrast_limits) == (-760, 840)


@pytest.mark.parametrize("function", FUNCTIONS)
def test_what_is_shown_can_be_read_back(layer, function):
    show_window(layer, -600, 1500, function)
    found = shown_window(layer, function)
    assert (found.centre, found.width, found.function) == (-600, 1500, function)


def test_data_are_never_touched(layer):
    before = layer.data.copy()
    held = layer.data
    for function in FUNCTIONS:
        show_window(layer, 0, 100, function)
    assert layer.data is held
    assert np.array_equal(layer.data, before)


def test_a_sigmoid_keeps_the_colours_and_gives_them_back(layer):
    layer.colormap = "viridis"
    show_window(layer, 40, 400, "SIGMOID")
    show_window(layer, 40, 300, "SIGMOID")
    assert is_sigmoid(layer)
    assert layer.colormap.name == "viridis · sigmoid"
    middle = layer.colormap.map(np.array([0.5]))
    from napari.utils.colormaps import ensure_colormap

    assert middle == pytest.approx(ensure_colormap("viridis").map(np.array([0.5])), abs=1e-6)
    show_window(layer, 40, 400, "LINEAR")
    assert layer.colormap.name == "viridis"
    assert not is_sigmoid(layer)


def test_a_step_of_width_one_can_be_shown(layer):
    show_window(layer, 12, 1, "LINEAR")
    low, high = layer.contrast_limits
    assert 11 < low < 11.5 < high < 12


def test_no_window_no_change(layer):
    show_window(layer, 40, 400, "LINEAR")
    with pytest.raises(ArgumentError, match="'width' must be at least 1"):
        show_window(layer, 40, 0.5, "LINEAR")
    assert tuple(layer.contrast_limits) == (-160, 239)


@pytest.mark.canvas
def test_the_canvas_shows_dicom_s_greys(make_napari_viewer):
    """Every CT number from -1000 to 1000 in steps of 4, on a real canvas.

    One grey level is allowed: half a level of rounding, and the card's interpolation of its own
    256-step lookup.
    """
    viewer = make_napari_viewer(show=True)
    shown = viewer.add_image(np.tile(RAMP, (60, 1)), rgb=False)
    for function in FUNCTIONS:
        for centre, width in ((40, 400), (0, 1500), (40, 80)):
            show_window(shown, centre, width, function)
            picture = viewer.export_figure(scale_factor=1, flash=False)
            assert picture.shape[1] == len(RAMP)
            row = picture[picture.shape[0] // 2, :, 0].astype(float)
            wanted = windowed(RAMP, centre, width, function=function)
            assert np.abs(row - wanted).max() <= 1.0, (function, centre, width)


@pytest.mark.canvas
def test_limits_alone_would_not_show_a_sigmoid(make_napari_viewer):
    """The canary of the test above: the same limits with a plain colour map are far off."""
    viewer = make_napari_viewer(show=True)
    shown = viewer.add_image(np.tile(RAMP, (60, 1)), rgb=False)
    show_window(shown, 40, 400, "SIGMOID")
    shown.colormap = "gray"
    row = viewer.export_figure(scale_factor=1, flash=False)[30, :, 0].astype(float)
    assert np.abs(row - windowed(RAMP, 40, 400, function="SIGMOID")).max() > 40
