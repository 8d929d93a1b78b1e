"""The MTF dock finds what to measure on the slice shown, draws it, and says why not the rest."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import ndtr

from ct_measure_plugin.physics.volume import Volume
from ct_measure_plugin.viewer.docks.mtf import MtfDock
from ct_measure_plugin.viewer.layers import layer_of

#: Gaussian blur of everything in the picture, mm, and its f50 in closed form: 0.187391 / sigma.
SIGMA = 0.6
F50 = 0.187391 / SIGMA


def scene() -> Volume:
    """A rod and a slanted half plane in slice 1 of three; the others hold noise alone."""
    rng = np.random.default_rng(4)
    y, x = np.mgrid[0:160, 0:160] * 0.5
    turn = np.radians(4.0)
    edge = 400 * ndtr(((x - 58) * np.cos(turn) + (y - 40) * np.sin(turn)) / SIGMA)
    rod = 300 * ndtr((9.0 - np.hypot(y - 40, x - 22)) / SIGMA)
    noise = rng.normal(0, 3, (3, 160, 160))
    stack = noise + np.array([0, 1, 0])[:, None, None] * (edge + rod)
    return Volume(np.rint(stack).astype(np.int16), (2.0, 0.5, 0.5), origin_mm=(0.0, -40.0, -30.0))


@pytest.fixture
def dock(qtbot, viewer_model):
    data, attributes, _ = layer_of(scene(), "CT")
    viewer_model.add_image(data, **attributes)
    made = MtfDock(viewer_model)
    qtbot.addWidget(made)
    viewer_model.dims.set_current_step(0, 1)
    return made


def test_edges_and_rods_are_drawn_each_for_its_measurement(dock, viewer_model):
    dock.suggest_button.click()
    assert "1 straight edge" in dock.suggested.text()
    assert "1 round edge" in dock.suggested.text()
    layer = viewer_model.layers["Suggested: MTF of a straight edge"]
    assert dock.sources.chosen_regions() is layer
    dock.measure_now()
    [answer] = dock.answers.answers()
    assert answer.result.f50.value == pytest.approx(F50, rel=0.03)  # noise of 0.75 % of the step
    dock.choose_measurement("disc_mtf")
    dock.measure_now()
    [answer] = dock.answers.answers()
    assert answer.result.radius.value == pytest.approx(9.0, abs=0.05)
    assert answer.result.center_mm == pytest.approx((0.0, -8.0), abs=0.05)


def test_what_people_change_about_a_suggestion_stays(dock, viewer_model):
    dock.suggest_button.click()
    layer = dock.sources.chosen_regions()
    layer.data = [one + np.array([0, 2, 0]) for one in layer.data]
    moved = [np.asarray(one) for one in layer.data]
    dock.choose_measurement("disc_mtf")
    dock.choose_measurement("edge_mtf")
    assert dock.sources.chosen_regions() is layer
    np.testing.assert_array_equal(layer.data, moved)
    dock.suggest_button.click()
    assert dock.sources.chosen_regions() is layer
    assert not np.array_equal(layer.data, moved)
    assert len([one for one in viewer_model.layers if one.name.startswith("Suggested")]) == 2


def test_a_target_that_is_not_there_leads_to_one_that_is(dock, viewer_model):
    dock.choose_measurement("wire_mtf")
    dock.suggest_button.click()
    assert dock.which.currentData() in ("edge_mtf", "disc_mtf")
    assert dock.sources.chosen_regions().nshapes == 1


def test_nothing_is_said_to_be_nothing(dock, viewer_model):
    viewer_model.dims.set_current_step(0, 0)
    dock.suggest_button.click()
    assert dock.suggested.text() == "Nothing on this slice would measure an MTF well."
    assert len(viewer_model.layers) == 1
    viewer_model.layers.clear()
    dock.reset_choices()
    dock.suggest_button.click()
    assert dock.suggested.text() == "Open an image first, or tick one."
