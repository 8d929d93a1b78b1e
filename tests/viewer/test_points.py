"""A point with a size is the disc that is drawn there."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.physics.regions import Disc
from ct_measure_plugin.viewer.layers import layer_of, placement_of
from ct_measure_plugin.viewer.points import points_on

FLOAT32 = 2e-5  # mm; napari keeps sizes in float32, coordinates here are below 100


@pytest.fixture
def scene(viewer_model, volume):
    data, attributes, _ = layer_of(volume, "CT")
    image = viewer_model.add_image(data, **attributes)
    return viewer_model, image, placement_of(image)


def test_a_point_in_voxels_is_a_disc_in_millimetres(scene, volume):
    """Size 10 on pixels of 0.7 mm is a diameter of 7 mm; row 15, column 25 of slice 3."""
    viewer, image, placement = scene
    layer = viewer.add_points(
        [[3, 15, 25]], size=10, scale=image.scale, translate=image.translate, units="mm"
    )
    [found] = points_on(layer, placement, viewer.dims.point)
    assert isinstance(found.region, Disc)
    assert found.region.radius_mm == pytest.approx(3.5, abs=FLOAT32)
    expected = (-14.0 + 15 * 0.7, 7.0 + 25 * 0.7)
    assert found.region.center_mm == pytest.approx(expected, abs=FLOAT32)
    assert found.region.z_mm == volume.positions_mm[3]


def test_a_point_in_millimetres_keeps_its_diameter(scene):
    """A flat layer in mm: it lies on the slice shown."""
    viewer, _, placement = scene
    layer = viewer.add_points([[-1.0, 20.0]], size=6.0, units="mm")
    viewer.dims.set_point(0, placement.volume.positions_mm[4])
    [found] = points_on(layer, placement, viewer.dims.point)
    assert found.region.radius_mm == pytest.approx(3.0, abs=FLOAT32)
    assert found.region.center_mm == pytest.approx((-1.0, 20.0), abs=FLOAT32)
    assert found.region.z_mm == placement.volume.positions_mm[4]


def test_points_that_are_no_region_say_why(scene):
    viewer, image, placement = scene
    layer = viewer.add_points(
        np.array([[1, 10, 10], [9, 10, 10]], float), size=[0, 4],
        scale=image.scale, translate=image.translate, units="mm",
    )  # fmt: skip
    first, second = points_on(layer, placement, viewer.dims.point)
    assert first.region is None
    assert "size 0 has no area" in first.problem
    assert second.region is None
    assert "above or below the volume" in second.problem
    assert [one.name for one in (first, second)] == ["point 1", "point 2"]


def test_no_points_are_no_regions(scene):
    viewer, _, placement = scene
    assert points_on(viewer.add_points(ndim=3), placement, viewer.dims.point) == ()
