"""What is drawn is what is measured: shapes as regions in millimetres."""

from __future__ import annotations

import math

import numpy as np
import pytest

from ct_measure_plugin.physics.regions import Box, Disc, Ellipse, Ellipsoid, Path, Polygon, Segment
from ct_measure_plugin.viewer.layers import layer_of, placement_of
from ct_measure_plugin.viewer.shapes import (
    drawn_on,
    names_on,
    new_regions_layer,
    rename,
    repair,
    shape_of,
)

FLOAT32 = 2e-5  # mm; napari keeps corners in float32, coordinates here are below 100


@pytest.fixture
def scene(viewer_model, volume):
    data, attributes, _ = layer_of(volume, "CT")
    image = viewer_model.add_image(data, **attributes)
    return viewer_model, image, placement_of(image)


def add(scene, corners, kind, **more):
    viewer, image, placement = scene
    layer = new_regions_layer(viewer, image)
    layer.add(np.asarray(corners, dtype=float), shape_type=kind, **more)
    return drawn_on(layer, placement, viewer.dims.point)


def on_slice(k, corners):
    return [[k, *corner] for corner in corners]


def test_a_circle_becomes_a_disc_in_millimetres(scene, volume):
    """Corners in voxels: rows 10 to 20, columns 20 to 30 on slice 3, pixels of 0.7 mm."""
    [found] = add(scene, on_slice(3, [(10, 20), (10, 30), (20, 30), (20, 20)]), "ellipse")
    assert isinstance(found.region, Disc)
    assert found.region.radius_mm == pytest.approx(3.5, abs=FLOAT32)
    expected = (-14.0 + 15 * 0.7, 7.0 + 25 * 0.7)
    assert found.region.center_mm == pytest.approx(expected, abs=FLOAT32)
    assert found.region.z_mm == volume.positions_mm[3]


@pytest.mark.parametrize("angle", [0.0, 30.0, 90.0, 135.0, 170.0])
@pytest.mark.parametrize("kind", ["ellipse", "rectangle"])
def test_a_turned_shape_keeps_its_angle(scene, volume, kind, angle):
    """Drawn with napari's own corners at an angle counter-clockwise on the screen."""
    made = (
        Ellipse((0.0, 25.0), (3.0, 8.0), angle, z_mm=-15.0)
        if kind == "ellipse"
        else Box((0.0, 25.0), (6.0, 16.0), angle, z_mm=-15.0)
    )
    corners, word = shape_of(made)
    assert word == kind
    voxels = (corners - np.asarray(volume.origin_mm[1:])) / 0.7
    [found] = add(scene, on_slice(2, voxels), kind)
    assert type(found.region) is type(made)
    assert found.region.center_mm == pytest.approx(made.center_mm, abs=FLOAT32)
    difference = (found.region.angle_deg - angle + 90.0) % 180.0 - 90.0
    if kind == "rectangle" and abs(difference) > 45:
        # a box that stands on end: width and height have changed places
        assert found.region.size_mm == pytest.approx(made.size_mm[::-1], abs=1e-4)
    else:
        assert difference == pytest.approx(0.0, abs=1e-3)
    assert found.region.area_mm2 == pytest.approx(made.area_mm2, rel=1e-5)


def test_a_polygon_keeps_its_corners(scene):
    [found] = add(scene, on_slice(0, [(5, 5), (5, 25), (30, 15)]), "polygon")
    assert isinstance(found.region, Polygon)
    assert found.region.area_mm2 == pytest.approx(250 * 0.49, rel=1e-5)


@pytest.mark.parametrize(
    ("corners", "kind", "problem"),
    [
        (on_slice(1, [(5, 5), (25, 25), (25, 5), (5, 25)]), "polygon", "must not cross itself"),
        (on_slice(1, [(5, 5), (5, 5)]), "path", "must have at least 2 corners"),
        ([[1, 5, 5], [2, 5, 25], [1, 30, 15]], "polygon", "lie on different slices"),
        (on_slice(9, [(5, 5), (5, 25), (30, 15)]), "polygon", "above or below the volume"),
    ],
)
def test_what_cannot_be_a_region_says_why(scene, corners, kind, problem):
    [found] = add(scene, corners, kind)
    assert found.region is None
    assert problem in found.problem


def test_a_flat_layer_follows_the_slice_shown(scene, volume):
    viewer, _, placement = scene
    layer = viewer.add_shapes(
        [np.array([[-7.0, 14.0], [-7.0, 28.0], [7.0, 28.0], [7.0, 14.0]])],
        shape_type="ellipse", units="mm",
    )  # fmt: skip
    for k in (0, 4):
        viewer.dims.set_point(0, volume.positions_mm[k])
        [found] = drawn_on(layer, placement, viewer.dims.point)
        assert found.region.z_mm == volume.positions_mm[k]
        assert found.region.center_mm == pytest.approx((0.0, 21.0), abs=FLOAT32)


def test_a_layer_in_other_pixels_means_the_same_place(scene):
    """A Shapes layer of 0.1 mm units shifted by (1, 2) mm: its own transform is followed."""
    viewer, _, placement = scene
    layer = viewer.add_shapes(
        [np.array([[0, 0], [0, 100], [100, 100], [100, 0]])], shape_type="rectangle",
        scale=(0.1, 0.1), translate=(-6.0, 12.0), units="mm",
    )  # fmt: skip
    [found] = drawn_on(layer, placement, viewer.dims.point)
    assert found.region.center_mm == pytest.approx((-1.0, 17.0), abs=FLOAT32)
    assert found.region.size_mm == pytest.approx((10.0, 10.0), abs=FLOAT32)


def test_stretched_pixels_turn_a_drawn_circle_into_the_ellipse_it_is(viewer_model):
    """A foreign layer with rows of 1 mm and columns of 0.5 mm, drawn at 45° in its pixels."""
    image = viewer_model.add_image(np.zeros((60, 60)), scale=(1.0, 0.5), units="mm")
    placement = placement_of(image)
    layer = new_regions_layer(viewer_model, image)
    turn = math.radians(45)
    along, across = (
        np.array([-math.sin(turn), math.cos(turn)]),
        np.array([-math.cos(turn), -math.sin(turn)]),
    )
    corners = [
        30 + i * 10 * along + j * 10 * across for i, j in ((-1, -1), (1, -1), (1, 1), (-1, 1))
    ]
    layer.add(np.asarray(corners), shape_type="ellipse")
    [found] = drawn_on(layer, placement, viewer_model.dims.point)
    assert sorted(found.region.radii_mm) == pytest.approx([5.0, 10.0], abs=1e-4)
    assert found.region.angle_deg == pytest.approx(90.0, abs=1e-3)


def test_names_live_in_the_features_beside_foreign_columns(scene):
    viewer, image, _ = scene
    layer = new_regions_layer(viewer, image)
    square = [(5, 5), (5, 25), (25, 25), (25, 5)]
    layer.add(np.asarray(on_slice(1, square)), shape_type="rectangle")
    layer.features = {"foreign": [3.5]}
    layer.add(np.asarray(on_slice(1, square)), shape_type="ellipse")
    rename(layer, 1, " liver ")
    assert names_on(layer) == ["region 1", "liver"]
    assert layer.features["foreign"].iloc[0] == 3.5


def test_a_cancelled_polygon_is_repaired(scene):
    """napari leaves one row of features too many; a later shape would take it over."""
    viewer, image, placement = scene
    layer = new_regions_layer(viewer, image)
    layer.add(np.asarray(on_slice(1, [(5, 5), (5, 25), (25, 25), (25, 5)])), shape_type="rectangle")
    rename(layer, 0, "kept")
    assert repair(layer) is False
    layer._feature_table.append(layer._feature_table.defaults)  # what the bug amounts to
    assert len(layer.features) == 2
    assert repair(layer) is True
    assert len(layer.features) == layer.nshapes == 1
    assert drawn_on(layer, placement, viewer.dims.point)[0].name == "kept"


def tagged(scene, corners, kind, **columns):
    viewer, image, placement = scene
    layer = new_regions_layer(viewer, image)
    layer.add(np.asarray(corners, dtype=float), shape_type=kind)
    layer.features = {name: [value] for name, value in columns.items()}
    return drawn_on(layer, placement, viewer.dims.point)


CIRCLE = [(10, 20), (10, 30), (20, 30), (20, 20)]


def test_a_line_is_the_strip_that_its_edge_covers(scene):
    """Edge width 3 on pixels of 0.7 mm: a strip of 2.1 mm."""
    [found] = add(scene, on_slice(1, [(5, 5), (25, 25)]), "line", edge_width=3)
    assert isinstance(found.region, Segment)
    assert found.region.width_mm == pytest.approx(2.1, abs=FLOAT32)
    assert found.region.start_mm == pytest.approx((-14 + 3.5, 7 + 3.5), abs=FLOAT32)
    assert found.region.length_mm == pytest.approx(20 * math.sqrt(2) * 0.7, abs=FLOAT32)


def test_a_path_keeps_its_corners_and_the_width_of_its_edge(scene):
    """A double click draws the last corner twice; it counts once."""
    corners = [(5, 5), (25, 25), (5, 30), (5, 30)]
    [found] = add(scene, on_slice(1, corners), "path", edge_width=3)
    assert isinstance(found.region, Path)
    assert found.region.width_mm == pytest.approx(2.1, abs=FLOAT32)
    drawn = np.asarray(found.region.vertices_mm)
    expected = np.asarray(corners[:3]) * 0.7 + (-14, 7)
    np.testing.assert_allclose(drawn, expected, atol=FLOAT32)
    kept, kind = shape_of(found.region)
    assert kind == "path"
    np.testing.assert_array_equal(kept, drawn)


def test_the_width_of_a_line_is_in_its_own_layers_units(scene):
    viewer, _, placement = scene
    layer = viewer.add_shapes(
        [np.array([[0, 0], [0, 100]])], shape_type="line", edge_width=20, scale=(0.1, 0.1),
        translate=(-6.0, 12.0), units="mm",
    )  # fmt: skip
    [found] = drawn_on(layer, placement, viewer.dims.point)
    assert found.region.width_mm == pytest.approx(2.0, abs=FLOAT32)


@pytest.mark.parametrize(
    ("low", "high", "expected"),
    [
        (-20.0, -12.5, (-20.0, -12.5)),
        (math.nan, -7.5, (-12.5, -7.5)),
        (-17.5, math.nan, (-17.5, -12.5)),
        (-math.inf, math.inf, None),
        (-math.inf, -15.0, (-20.0, -15.0)),
    ],
)
def test_a_region_reaches_over_the_slices_that_its_features_say(scene, low, high, expected):
    """Drawn on slice 3, at -12.5 mm."""
    [found] = tagged(scene, on_slice(3, CIRCLE), "ellipse", z_low_mm=low, z_high_mm=high)
    assert found.region.z_mm == expected


def test_an_ellipse_is_swept_to_the_ellipsoid_that_ends_with_its_slices(scene):
    """Slices 1 to 4 of 2.5 mm: four slabs, 10 mm from end to end."""
    [found] = tagged(
        scene, on_slice(3, CIRCLE), "ellipse",
        z_low_mm=-17.5, z_high_mm=-10.0, swept_to="ellipsoid", name="bead",
    )  # fmt: skip
    assert isinstance(found.region, Ellipsoid)
    assert found.region.z_radius_mm == 5.0
    assert found.region.z_mm == -13.75
    assert found.region.name == "bead"
    assert found.region.radii_mm == pytest.approx((3.5, 3.5), abs=FLOAT32)


@pytest.mark.parametrize(
    ("kind", "columns", "problem"),
    [
        ("ellipse", {}, "needs several slices"),
        ("rectangle", {"z_low_mm": -20.0, "z_high_mm": -10.0}, "a box cannot be swept"),
    ],
)
def test_what_cannot_be_swept_says_why(scene, kind, columns, problem):
    [found] = tagged(scene, on_slice(3, CIRCLE), kind, swept_to="ellipsoid", **columns)
    assert found.region is None
    assert problem in found.problem


def test_class_code_and_range_of_values_belong_to_the_region(scene):
    words = {"class": "insert", "code": "SCT:1234", "value_low": -50.0}
    [found] = tagged(scene, on_slice(3, CIRCLE), "ellipse", **words)
    assert (found.group, found.code) == ("insert", "SCT:1234")
    assert (found.region.group, found.region.code) == ("insert", "SCT:1234")
    assert found.region.values == (-50.0, math.inf)


def test_a_code_that_is_none_is_told_in_the_row(scene):
    [found] = tagged(scene, on_slice(3, CIRCLE), "ellipse", code="1234")
    assert found.region is None
    assert "must be scheme:value" in found.problem
