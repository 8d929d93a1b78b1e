"""The map of the noise lies over its image, slice by slice, and says the noise at each place."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.physics import local_sd
from ct_measure_plugin.physics.volume import Volume
from ct_measure_plugin.viewer.docks.uniformity import UniformityDock
from ct_measure_plugin.viewer.layers import layer_of


def test_the_whole_map_opens_as_a_layer_where_the_image_lies(qtbot, viewer_model):
    noise = (
        np.random.default_rng(8).normal(0, 1, (3, 60, 50)) * np.array([5, 10, 20])[:, None, None]
    )
    volume = Volume(noise.astype(np.float32), (2.0, 0.5, 0.7), origin_mm=(10.0, -15.0, 4.0))
    data, attributes, _ = layer_of(volume, "CT")
    image = viewer_model.add_image(data, **attributes)
    dock = UniformityDock(viewer_model)
    qtbot.addWidget(dock)
    assert dock.map_button.isHidden()
    dock.choose_measurement("noise_map")
    assert not dock.map_button.isHidden()
    dock.form.show(dock.form.settings.model_copy(update={"window_px": 9}))
    layer = dock.open_map()
    assert layer.name == "Local SD of CT"
    np.testing.assert_allclose(layer.scale, image.scale)
    np.testing.assert_allclose(layer.translate, image.translate)
    np.testing.assert_array_equal(layer.data, local_sd(volume.hu, window_px=9))
    # some 25 windows apart, each known to 8 %
    found = [float(np.nanmedian(one)) for one in layer.data]
    assert found == pytest.approx([5, 10, 20], rel=0.06)
    dock.form.show(dock.form.settings.model_copy(update={"window_px": 55}))
    assert dock.open_map() is None
    assert "must be odd" in dock.headline.words.text()
