"""The dock of the CT-number scale: rods found and named, the line live, and a layer of μ."""

from __future__ import annotations

import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from ct_measure_plugin.measurements import measure
from ct_measure_plugin.measurements.rod_layouts import layout_of, save_layout
from ct_measure_plugin.physics.regions import Disc
from ct_measure_plugin.viewer.demo import draw_regions
from ct_measure_plugin.viewer.docks.ct_number_line import CtNumberLineDock
from ct_measure_plugin.viewer.layers import KEY, layer_of
from ct_measure_plugin.viewer.shapes import names_on

sys.path.append(str(Path(__file__).parents[1] / "measurements"))
from rod_images import NAMES, RADIUS, RING, ring_of_rods


@pytest.fixture(scope="module")
def rods():
    return replace(ring_of_rods(noise=5.0, seed=1), origin_mm=(10.0, -20.0, 30.0),
                   slice_positions_mm=None)  # fmt: skip


def moved(region):
    y, x = region.center_mm
    return replace(region, center_mm=(y - 20.0, x + 30.0), z_mm=10.0)


@pytest.fixture
def layout(tmp_path):
    """The rods as they are, turned by a quarter."""
    turned = [Disc((r.center_mm[1], -r.center_mm[0]), RADIUS, name=r.name) for r in RING]
    return save_layout(layout_of(turned, title="Ring (invented)"), tmp_path / "ring.yaml")


@pytest.fixture
def dock(qtbot, viewer_model, rods):
    """The dock on an image without regions."""
    data, attributes, _ = layer_of(rods, "CT 1")
    viewer_model.add_image(data, **attributes)
    made = CtNumberLineDock(viewer_model)
    qtbot.addWidget(made)
    made.reset_choices()
    return made


def draw(dock, regions):
    image = dock.sources.chosen_images()[0]
    layer = draw_regions(dock.viewer, image, [moved(r) for r in regions])
    dock.reset_choices()
    dock.choose(image, regions=layer)
    return layer


def test_named_rods_give_the_line_of_python(dock, rods):
    draw(dock, RING)
    dock.refresh_now()
    dock.measure_now()
    [answer] = dock.answers.answers()
    direct = measure("ct_number_line", rods, [moved(r) for r in RING])
    # corners are float32
    assert answer.result.effective_energy.value == pytest.approx(
        direct.effective_energy.value, rel=1e-3
    )
    assert dock.materials.chosen() == list(NAMES)
    assert dock.answers.fields()[:4] == ["line", "residuals", "energy_curve", "correlation_curve"]
    assert "rods" in dock.answers.fields()


def test_a_rod_is_named_from_the_list(dock):
    """Regions drawn without names are asked about; choosing a material names the shape."""
    layer = draw(dock, [*RING[:7], replace(RING[7], name="")])
    dock.refresh_now()
    assert dock.materials.chosen()[7] == ""
    box = dock.materials._boxes[7]
    assert "choose its material" in box.placeholderText()
    box.setCurrentIndex(box.findText("nylon-6"))
    box.activated.emit(box.currentIndex())
    assert names_on(layer)[7] == "nylon-6"
    dock.refresh_now()
    dock.measure_now()
    assert dock.materials.chosen() == list(NAMES)
    [answer] = dock.answers.answers()
    assert len(answer.result.rods) == 8


def test_rods_are_found_and_drawn(dock, layout):
    dock.find_rods(str(layout))
    assert dock.found.text().startswith("8 rods, turned by 90.0")
    layer = dock.sources.chosen_regions()
    assert layer.name == "Rods"
    assert names_on(layer) == list(NAMES)
    dock.measure_now()
    [answer] = dock.answers.answers()
    energy = answer.result.effective_energy
    assert abs(energy.value - 70.0) < 3 * energy.uncertainty
    [question] = dock._asked
    for region, drawn in zip(question.regions, RING, strict=True):
        assert np.hypot(*np.subtract(region.center_mm, moved(drawn).center_mm)) < 0.3
        assert region.name == drawn.name


def test_a_layout_that_does_not_fit_is_told(dock, layout, tmp_path):
    text = layout.read_text(encoding="utf-8")
    layout.write_text(text.replace("diameter_mm: 8.0", "diameter_mm: 2.0"), encoding="utf-8")
    dock.find_rods(str(layout))
    assert dock.found.text().startswith("Not measured: ")
    assert dock.sources.chosen_regions() is None
    dock.find_rods(str(tmp_path / "none.yaml"))
    assert dock.found.text() == "none.yaml: cannot be read (No such file or directory)"


def test_the_line_follows_a_rod(dock, qtbot):
    """A rod moved off into water reads 0: it is named, and the line changes."""
    layer = draw(dock, RING)
    dock.measure_now()
    before = dock.answers.answers()[0].result
    dock.show()
    corners = [np.array(one) for one in layer.data]
    corners[3] = corners[3] + [0, 0, 12.0]
    layer.data = corners
    qtbot.waitUntil(lambda: not dock._timer.isActive() and not dock._following.busy)
    qtbot.waitUntil(lambda: dock.answers.answers()[0].result is not before)
    after = dock.answers.answers()[0].result
    assert after.rods[3].read.value < before.rods[3].read.value - 50


def test_a_layer_of_mu_is_opened_at_the_energy_found(dock, rods):
    draw(dock, RING)
    assert not dock.mu_button.isEnabled()
    dock.measure_now()
    assert dock.mu_button.isEnabled()
    layer = dock.open_mu()
    energy = dock.answers.answers()[0].result.effective_energy
    assert layer.name == f"CT 1, μ at {energy.value:.1f} keV"
    volume = layer.metadata[KEY]
    assert volume.unit == "cm⁻¹"
    assert hasattr(layer.data, "dask")
    np.testing.assert_allclose(layer.translate, dock.sources.chosen_images()[0].translate)
    water = np.asarray(layer.data[0])[50:54, 50:54].mean()
    assert water == pytest.approx(0.193, rel=0.03)  # μ of water about 70 keV, cm⁻¹
    found = measure("region_statistics", volume, moved(RING[3]))
    assert found.mean.unit == "cm⁻¹"


def test_a_layout_as_a_setting_needs_no_regions(dock, layout):
    """Regions that are drawn are then left alone, not measured."""
    draw(dock, RING[:2])
    settings = dock.form.settings
    kind = type(settings)
    dock.form.show(kind(layout=str(layout), layout_slices=2))
    dock.measure_now()
    [answer] = dock.answers.answers()
    assert answer.result.layout_rotation.value == pytest.approx(90.0, abs=0.5)
    assert len(answer.result.places) == 8


def test_without_an_image_it_says_so(qtbot, viewer_model, layout):
    made = CtNumberLineDock(viewer_model)
    qtbot.addWidget(made)
    made.find_rods(str(layout))
    assert made.found.text() == "Open an image first, or tick one."
    assert made.open_mu() is None
