"""Repeat scans are subtracted in the dock: the object goes, the noise of one scan stays."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.measurements import find
from ct_measure_plugin.measurements.noise_spectrum import NoiseSpectrum
from ct_measure_plugin.physics.noise_power import noise_power
from ct_measure_plugin.physics.regions import Disc
from ct_measure_plugin.physics.volume import Volume
from ct_measure_plugin.viewer.demo import draw_regions
from ct_measure_plugin.viewer.docks.noise_power import NoisePowerDock
from ct_measure_plugin.viewer.layers import layer_of

NOISE = 10.0


def scan(seed: int, shape=(6, 96, 96)) -> Volume:
    """White noise over a steep slope that no polynomial of second degree takes out."""
    y, x = np.mgrid[: shape[1], : shape[2]]
    clean = 60 * np.sin(x / 5.0) * np.cos(y / 7.0)
    noise = np.random.default_rng(seed).normal(0, NOISE, shape)
    return Volume((clean + noise).astype(np.float32), (2.0, 0.5, 0.5))


@pytest.fixture
def dock(qtbot, viewer_model):
    for seed in (1, 2):
        data, attributes, _ = layer_of(scan(seed), f"scan {seed}")
        viewer_model.add_image(data, **attributes)
    layer = draw_regions(viewer_model, viewer_model.layers[0], [Disc((23.75, 23.75), 23)])
    made = NoisePowerDock(viewer_model)
    qtbot.addWidget(made)
    made.form.show(made.form.settings.model_copy(update={"patch_px": 32}))
    made.choose(viewer_model.layers[0], regions=layer)
    return made


def test_the_object_goes_and_the_noise_of_one_scan_stays(dock, viewer_model):
    dock.measure_now()
    [before] = dock.answers.answers()
    assert not dock.subtract_button.isEnabled()
    dock.choose(viewer_model.layers[0], viewer_model.layers[1])
    assert dock.subtract_button.isEnabled()
    dock.subtract_button.click()
    layer = viewer_model.layers["(scan 2 − scan 1)/√2"]
    assert dock.sources.chosen_images() == (layer,)
    assert dock.form.settings.detrend == "mean"
    np.testing.assert_allclose(layer.scale, viewer_model.layers[0].scale)
    dock.measure_now()
    [after] = dock.answers.answers()
    assert "structure" in str(before.result), str(before.result)
    assert abs(after.result.sd.value - NOISE) < 3 * after.result.sd.uncertainty


def test_scans_of_different_grids_are_refused_in_words(dock, viewer_model):
    data, attributes, _ = layer_of(scan(3, shape=(6, 96, 90)), "narrower")
    viewer_model.add_image(data, **attributes)
    dock.reset_choices()
    dock.choose(viewer_model.layers["narrower"], viewer_model.layers["scan 1"])
    assert dock.subtract() is None
    assert "must have the shape" in dock.headline.words.text()


def test_a_region_is_suggested_where_the_material_is_uniform(qtbot, viewer_model):
    """A water cylinder with a rod, on two of three slices: the disc lies in the water beside it."""
    y, x = (np.mgrid[:160, :160] - 79.5) * 0.5
    water = np.where(np.hypot(y, x) < 35, 0.0, -1000.0)
    noise = np.random.default_rng(4).normal(0, NOISE, (3, 160, 160))
    values = water + noise
    values[:2, np.hypot(y - 20, x) < 6] += 200
    values[2, 60:100, 60:100] += 200
    data, attributes, _ = layer_of(Volume(values.astype(np.float32), (2.0, 0.5, 0.5)), "CT")
    viewer_model.add_image(data, **attributes)
    dock = NoisePowerDock(viewer_model)
    qtbot.addWidget(dock)
    viewer_model.dims.set_current_step(0, 1)
    dock.form.show(dock.form.settings.model_copy(update={"patch_px": 32}))
    layer = dock.suggest()
    assert dock.sources.chosen_regions() is layer
    dock.measure_now()
    [answer] = dock.answers.answers()
    assert abs(answer.result.sd.value - NOISE) < 3 * answer.result.sd.uncertainty
    assert {mark.z_mm for mark in answer.marks} == {0.0, 2.0}
    dock.form.show(dock.form.settings.model_copy(update={"patch_px": 128}))
    assert dock.suggest() is None
    assert "patches of this size need 45.3 mm" in dock.suggested.text()


def test_detectability_takes_what_the_docks_measured_last(dock):
    """The patches stay as they were set; spectrum and MTF come without a file, and go again."""
    noise = np.random.default_rng(5).normal(0, NOISE, (40, 32, 32))
    spectrum = noise_power(noise, spacing_mm=(0.5, 0.5))
    dock.choose_measurement("detectability")
    assert dock.form.settings.patch_px == 32
    control = dock.form._controls["noise_spectrum"]
    dock.session.show_answers("noise_power", ())
    control._take.native.click()
    assert dock.form.settings.noise_spectrum is None
    assert control._file.line_edit.native.placeholderText() == "none was measured yet"
    dock.session.show_answers("noise_power", (spectrum,))
    control._take.native.click()
    assert dock.form.settings.noise_spectrum == NoiseSpectrum.of(spectrum)
    dock.measure_now()
    [answer] = dock.answers.answers()
    volume = dock.session.placement(dock.sources.chosen_images()[0]).volume
    whole = find("detectability").measure(volume, (), dock.form.settings)
    assert answer.result.npw == whole.npw
    control._take.native.click()
    assert dock.form.settings.noise_spectrum is None
