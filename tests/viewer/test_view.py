"""A region comes into view: its slice and its place, and nothing moves that need not."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.physics.regions import Box, Disc, Mask
from ct_measure_plugin.viewer.layers import layer_of, placement_of
from ct_measure_plugin.viewer.view import bounds_of, bring_into_view


@pytest.fixture
def scene(viewer_model, volume):
    data, attributes, _ = layer_of(volume, "CT")
    image = viewer_model.add_image(data, **attributes)
    return viewer_model, placement_of(image)


def test_the_slice_turns_to_the_nearest_one_of_the_region(scene, volume):
    viewer, placement = scene
    viewer.dims.set_point(0, volume.positions_mm[0])
    region = Disc((0.0, 24.0), 3.0, z_mm=(-15.0, -10.0))
    assert bring_into_view(viewer, region, placement) == 2
    assert viewer.dims.point[0] == volume.positions_mm[2]
    viewer.dims.set_point(0, volume.positions_mm[3])
    assert bring_into_view(viewer, region, placement) == 3


def test_what_lies_on_every_slice_turns_none(scene, volume):
    viewer, placement = scene
    viewer.dims.set_point(0, volume.positions_mm[5])
    assert bring_into_view(viewer, Disc((0.0, 24.0), 3.0), placement) == 5
    assert bring_into_view(viewer, Disc((0.0, 24.0), 3.0, z_mm=-20.0), placement, turn=False) == 5


def test_the_canvas_moves_only_when_it_must(scene):
    viewer, placement = scene
    viewer.dims.set_point(0, -15.0)
    before = viewer.scene.camera.center, viewer.scene.camera.zoom
    bring_into_view(viewer, Disc((0.0, 24.0), 3.0, z_mm=-15.0), placement)
    assert (viewer.scene.camera.center, viewer.scene.camera.zoom) == before
    viewer.scene.camera.zoom = 100.0  # some 8 mm by 6 mm are seen
    bring_into_view(viewer, Disc((10.0, 38.0), 1.0, z_mm=-15.0), placement)
    assert viewer.scene.camera.center[-2:] == pytest.approx((10.0, 38.0))
    assert viewer.scene.camera.zoom == 100.0


def test_a_region_larger_than_the_canvas_is_made_to_fit(scene):
    viewer, placement = scene
    viewer.dims.set_point(0, -15.0)
    viewer.scene.camera.zoom = 100.0
    bring_into_view(viewer, Box((0.0, 24.0), (20.0, 10.0), z_mm=-15.0), placement)
    height = viewer.canvas.viewbox_size(viewer.layers)[0]
    assert 20.0 * viewer.scene.camera.zoom == pytest.approx(0.6 * height)


def test_in_three_dimensions_the_canvas_stays(scene):
    viewer, placement = scene
    viewer.dims.ndisplay = 3
    before = viewer.scene.camera.center
    bring_into_view(viewer, Disc((300.0, 24.0), 3.0, z_mm=-15.0), placement)
    assert viewer.scene.camera.center == before


def test_bounds_of_a_mask_are_its_pixels_edges():
    mask = Mask(np.ones((2, 4, 6), bool), (2.0, 0.5, 0.7), (0.0, 10.0, 20.0))
    assert bounds_of(mask).tolist() == [[9.75, 19.65], [11.75, pytest.approx(23.85)]]
