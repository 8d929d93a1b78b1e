"""The spectrum of one dock states the standard errors of another."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.measurements import measure
from ct_measure_plugin.physics.regions import Box, Disc
from ct_measure_plugin.physics.volume import Volume
from ct_measure_plugin.viewer.demo import draw_regions
from ct_measure_plugin.viewer.docks.noise_power import NoisePowerDock
from ct_measure_plugin.viewer.docks.region_statistics import RegionStatisticsDock
from ct_measure_plugin.viewer.layers import layer_of


def test_region_statistics_take_the_spectrum_that_the_noise_dock_measured(qtbot, viewer_model):
    values = np.random.default_rng(9).normal(0, 10, (1, 128, 128)).astype(np.float32)
    volume = Volume(values, (2.0, 0.5, 0.5))
    data, attributes, _ = layer_of(volume, "CT")
    image = viewer_model.add_image(data, **attributes)
    water = draw_regions(viewer_model, image, [Box((31.75, 31.75), (60.0, 60.0))])
    noise = NoisePowerDock(viewer_model)
    qtbot.addWidget(noise)
    noise.form.show(noise.form.settings.model_copy(update={"patch_px": 32}))
    noise.choose(image, regions=water)
    noise.measure_now()
    spectrum = noise.answers.answers()[0].result
    drawn = draw_regions(viewer_model, image, [Disc((31.75, 31.75), 5.0, z_mm=0.0)])
    statistics = RegionStatisticsDock(viewer_model)
    qtbot.addWidget(statistics)
    statistics.choose(image, drawn)
    statistics.form._controls["noise_spectrum"]._take.native.click()
    statistics.refresh_now()
    statistics.board.stop()
    [row] = statistics.model.rows
    [own] = statistics.board.drawn
    expected = measure("region_statistics", volume, own.region, noise_spectrum=spectrum)
    assert row.answer.mean == expected.mean
    # white noise: σ over the root of the disc's pixels
    assert row.answer.mean.uncertainty == pytest.approx(10 * 0.5 / np.sqrt(25 * np.pi), rel=0.1)
    assert "spectrum-used" in {caution.code for caution in row.answer.cautions}
