"""Marks over the image: where they lie, on which slices, and what they leave alone."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.physics.regions import Box, Disc, Mask, Path, Segment
from ct_measure_plugin.viewer.layers import layer_of
from ct_measure_plugin.viewer.marks import MOST, Marks, outline_of, strokes_of
from ct_measure_plugin.viewer.session import Session
from ct_measure_plugin.viewer.shapes import new_regions_layer


@pytest.fixture
def scene(viewer_model, volume):
    data, attributes, _ = layer_of(volume, "CT")
    image = viewer_model.add_image(data, **attributes)
    return viewer_model, image, Session.of(viewer_model).placement(image)


def ends_in_world(marks, placement):
    """The strokes' ends as (z, y, x) in mm, through the layer's own transform."""
    found = []
    for start, step in marks.layer.data:
        found += [marks.layer.data_to_world(start), marks.layer.data_to_world(start + step)]
    return np.asarray(found)


def test_a_segment_is_drawn_where_it_is_on_each_of_its_slices(scene):
    viewer, _, placement = scene
    marks = Marks(viewer, "found")
    marks.show((Segment((-3.0, 10.0), (4.0, 30.0), z_mm=(-17.5, -15.0)),), placement)
    world = ends_in_world(marks, placement)
    expected = [[z, y, x] for z in (-17.5, -15.0) for y, x in ((-3.0, 10.0), (4.0, 30.0))]
    # napari keeps vectors as float32
    np.testing.assert_allclose(world, expected, rtol=1e-6, atol=1e-5)


def test_a_circle_is_round_in_mm_whatever_the_pixels(viewer_model, volume):
    from dataclasses import replace

    data, attributes, _ = layer_of(replace(volume, spacing_mm=(2.5, 0.5, 1.1)), "CT")
    image = viewer_model.add_image(data, **attributes)
    placement = Session.of(viewer_model).placement(image)
    marks = Marks(viewer_model, "found")
    marks.show((Disc((0.0, 24.0), 5.0, z_mm=-15.0),), placement)
    world = ends_in_world(marks, placement)
    radii = np.hypot(world[:, 1], world[:, 2] - 24.0)
    np.testing.assert_allclose(radii, 5.0, rtol=1e-5)
    assert set(np.round(world[:, 0], 6)) == {-15.0}


def test_a_box_closes_a_path_does_not_and_a_mask_has_no_outline():
    points, closed = outline_of(Box((0.0, 0.0), (2.0, 4.0)))
    assert closed
    assert len(points) == 4
    path = Path(((0.0, 0.0), (0.0, 2.0), (3.0, 4.0)))
    points, closed = outline_of(path)
    assert not closed
    assert points.tolist() == [list(corner) for corner in path.vertices_mm]
    mask = Mask(np.ones((3, 3), bool), spacing_mm=(1.0, 1.0, 1.0))
    assert len(outline_of(mask)[0]) == 0


def test_there_is_an_end_to_strokes(scene):
    _, _, placement = scene
    boxes = [Box((0.0, 20.0), (1.0, 1.0)) for _ in range(MOST)]  # each on every slice
    assert len(strokes_of(boxes, placement)) == MOST


def test_the_layer_stays_out_of_the_way(scene):
    """Drawing goes on, the selection stays, and no marks means no layer."""
    viewer, image, placement = scene
    shapes = new_regions_layer(viewer, image)
    shapes.mode = "add_rectangle"
    marks = Marks(viewer, "found")
    marks.show((), placement)
    assert marks.layer is None
    marks.show((Disc((0.0, 24.0), 5.0, z_mm=-15.0),), placement)
    assert viewer.layers.selection.active is shapes
    assert shapes.mode == "add_rectangle"
    assert [layer.name for layer in viewer.layers] == ["CT", "found", "Regions"]
    assert viewer.layers.units == image.units
    before = marks.layer
    marks.show((Disc((1.0, 24.0), 5.0, z_mm=-15.0),), placement)
    assert marks.layer is before
    viewer.layers.remove(before)
    marks.show((Disc((2.0, 24.0), 5.0, z_mm=-15.0),), placement)
    assert marks.layer is not before
    marks.clear()
    assert [layer.name for layer in viewer.layers] == ["CT", "Regions"]
    marks.clear()


def test_flat_images_have_flat_marks(viewer_model):
    from ct_measure_plugin.viewer.layers import Asked

    image = viewer_model.add_image(np.zeros((40, 50)), scale=(0.5, 0.5), units="mm")
    session = Session.of(viewer_model)
    session.answer(image, Asked(unit="HU"))
    marks = Marks(viewer_model, "found")
    marks.show((Segment((1.0, 2.0), (3.0, 4.0)),), session.placement(image))
    np.testing.assert_allclose(marks.layer.data, [[[2, 4], [4, 4]]])
