"""Plots draw what they are handed, in the theme's colours, and say what stands under the mouse."""

from __future__ import annotations

import numpy as np
import pytest
from napari.components import ViewerModel

from ct_measure_plugin.physics.results import Curve, Picture, Quantity
from ct_measure_plugin.viewer.pictures import add_picture, can_be_layer
from ct_measure_plugin.viewer.plots.curve_plot import CurvePlot
from ct_measure_plugin.viewer.plots.legend import Legend
from ct_measure_plugin.viewer.plots.picture_plot import PicturePlot
from ct_measure_plugin.viewer.plots.traces import Tick, Trace, end_of, reading, ticks_of
from ct_measure_plugin.viewer.theme import colours_of


def mtf(last=2.0, doubt=0.01):
    f = np.linspace(0, last, 41)
    u = None if doubt is None else np.full(41, doubt)
    return Curve(f, np.exp(-f), u, "frequency", "mm⁻¹", "MTF", "")


@pytest.fixture(params=["dark", "light"])
def colours(request):
    viewer = ViewerModel()
    viewer.theme = request.param
    return colours_of(viewer)


@pytest.fixture
def plot(qtbot):
    made = CurvePlot()
    qtbot.addWidget(made)
    return made


def test_frequencies_are_marked_and_widths_are_not():
    found = ticks_of(
        mtf(),
        [
            ("f50", Quantity(0.7, "mm⁻¹")),
            ("width", Quantity(0.9, "mm")),
            ("f2", None),
            ("nyquist", Quantity(7.0, "mm⁻¹")),
        ],
    )
    assert found == (Tick("f50", 0.7),)
    esf = Curve(np.arange(3.0), np.arange(3.0), None, "distance", "mm", "ESF", "HU")
    assert ticks_of(esf, [("width", Quantity(0.9, "mm"))]) == ()


def test_a_frequency_axis_ends_somewhat_beyond_nyquist():
    assert end_of(mtf(last=4.0), Quantity(1.0, "mm⁻¹")) == 1.5
    assert end_of(mtf(last=1.2), Quantity(1.0, "mm⁻¹")) is None
    assert end_of(mtf(), None) is None


def test_the_reading_is_the_nearest_sample_with_its_doubt():
    assert reading(mtf(), 0.52) == (10, "0.5 mm⁻¹: 0.607 ± 0.010")
    assert reading(mtf(doubt=None), -3)[1] == "0 mm⁻¹: 1"
    gap = Curve(np.array([0.0, 1.0]), np.array([1.0, np.nan]), None, "x", "mm", "y", "HU")
    assert reading(gap, 0.9)[1] == "1 mm: no value"


def test_line_band_axes_and_ticks_show_what_was_handed_over(plot, colours):
    plot.recolour(colours)
    curve = mtf()
    plot.show_traces([Trace("a", curve)], [Tick("f50", 0.7)], end=1.5)
    [drawn] = plot._drawn
    np.testing.assert_array_equal(drawn.line.getData()[1], curve.y)
    x, outline = drawn.band.getData()  # there along the lower end, and back along the upper one
    half = len(x) // 2
    np.testing.assert_array_equal(x[:half], x[: half - 1 : -1])
    np.testing.assert_allclose(outline[: half - 1 : -1] - outline[:half], 0.02)
    assert plot._plot.getAxis("bottom").labelText == "frequency (mm⁻¹)"
    assert plot._plot.getAxis("left").labelText == "MTF"
    assert plot._tick_items[0].value() == 0.7
    low, high = plot._plot.vb.viewRange()[0]
    assert low == pytest.approx(-0.03)
    assert high == pytest.approx(1.53)
    assert drawn.line.opts["pen"].color().name().upper() == colours.lines[0].upper()


def test_traces_come_and_go(plot):
    plot.show_traces([Trace("a", mtf()), Trace("b", mtf(doubt=None), 1, True)])
    assert len(plot._drawn) == 2
    assert not len(plot._drawn[1].band.getData()[0])
    count, each = len(plot._plot.items), len(plot._drawn[0]._items())
    plot.show_traces([Trace("a", mtf())])
    assert len(plot._plot.items) == count - each
    plot.show_traces([])
    assert plot.traces == ()


def residuals():
    x = np.array([0.0, 0.1, 0.3])
    return Curve(x, 2 - x, np.full(3, 0.5), "μ", "cm⁻¹", "Residual", "HU", joined=False)


def test_samples_that_stand_for_themselves_are_not_joined(plot):
    plot.show_traces([Trace("a", residuals())])
    [drawn] = plot._drawn
    assert drawn.line.getData()[0] is None or not len(drawn.line.getData()[0])
    assert drawn.points.getData()[1].tolist() == [2.0, 1.9, 1.7]
    assert drawn.bars.isVisible()
    plot.show_traces([Trace("a", mtf())])
    assert len(drawn.line.getData()[0])
    assert not drawn.bars.isVisible()
    assert drawn.points.getData()[0] is None or not len(drawn.points.getData()[0])


def test_a_fitted_curve_shows_what_it_was_fitted_to(plot):
    x = np.linspace(0, 0.3, 50)
    line = Curve(x, 2 - x, None, "μ", "cm⁻¹", "CT number", "HU", data=residuals())
    plot.show_traces([Trace("a", line)])
    [drawn] = plot._drawn
    assert len(drawn.line.getData()[0]) == 50
    assert len(drawn.points.getData()[0]) == 3
    assert reading(line, 0.11) == (1, "0.1 cm⁻¹: 1.90 ± 0.50 HU")


def test_energies_are_places_on_an_axis_of_energies():
    curve = Curve(np.array([30.0, 140.0]), np.zeros(2), None, "Energy", "keV", "Misfit", "")
    [tick] = ticks_of(curve, [("effective_energy", Quantity(70.0, "keV", 1.0)),
                              ("slope", Quantity(80.0, "HU cm", 1.0))])  # fmt: skip
    assert (tick.label, tick.x) == ("Effective energy", 70.0)


def test_unknown_doubt_in_places_leaves_the_line_whole(plot):
    curve = mtf()
    doubt = np.asarray(curve.y_uncertainty).copy()
    doubt[5] = np.nan
    plot.show_traces([Trace("a", Curve(curve.x, curve.y, doubt, "f", "mm⁻¹", "MTF", ""))])
    assert np.isfinite(plot._drawn[0].band.getData()[1]).all()


def test_the_mouse_reads_the_first_curve(plot, qtbot):
    heard = []
    plot.read.connect(heard.append)
    plot.resize(300, 220)
    plot.show()
    plot.show_traces([Trace("a", mtf())], end=1.5)
    qtbot.wait(50)
    from qtpy.QtCore import QPointF

    plot._on_mouse(plot._plot.vb.mapViewToScene(QPointF(0.5, 0.4)))
    assert heard[-1] == "0.5 mm⁻¹: 0.607 ± 0.010"
    assert plot._cursor.value() == pytest.approx(0.5)
    plot._on_mouse(QPointF(-50, -50))
    assert heard[-1] == ""
    assert not plot._cursor.isVisible()


def test_the_legend_names_curves_when_there_are_several(qtbot, colours):
    legend = Legend()
    qtbot.addWidget(legend)
    legend.recolour(colours)
    legend.show_traces([Trace("a", mtf())])
    assert legend.isHidden()
    legend.show_traces([Trace("<b>bold</b>", mtf()), Trace("x" * 80, mtf(), 1, True)])
    assert not legend.isHidden()
    assert legend.texts()[0] == "<b>bold</b>"
    assert legend._rows[0][1].text() == "<b>bold</b>"
    assert legend._rows[1][1].toolTip() == "x" * 80


def picture(unit="mm⁻¹"):
    values = np.arange(12.0).reshape(3, 4)
    values[0, 0] = np.nan
    return Picture(values, (0.5, 0.25), ("v", "u"), (unit, unit), "HU² mm²", (-0.5, 0.0))


def test_a_picture_lies_in_its_own_units(qtbot, colours):
    plot = PicturePlot()
    qtbot.addWidget(plot)
    plot.recolour(colours)
    plot.show_picture(picture())
    box = plot._image.mapRectToParent(plot._image.boundingRect())
    assert (box.left(), box.right()) == pytest.approx((-0.125, 0.875))
    assert (box.top(), box.bottom()) == pytest.approx((-0.75, 0.75))
    assert plot._bar.levels() == (1.0, 11.0)
    assert plot._plot.getAxis("left").labelText == "v (mm⁻¹)"


def test_a_picture_in_mm_can_be_a_layer(viewer_model):
    assert not can_be_layer(picture())
    layer = add_picture(viewer_model, picture("mm"), "map")
    assert can_be_layer(picture("mm"))
    np.testing.assert_allclose(layer.data_to_world((2, 3)), (0.5, 0.75))
    assert tuple(layer.contrast_limits) == (1.0, 11.0)
    assert layer.metadata["unit"] == "HU² mm²"
