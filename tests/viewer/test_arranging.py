"""Copies lie where geometry says, in mm, whatever the layer's units; numbers and answers stay."""

from __future__ import annotations

import math

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.viewer import arranging
from ct_measure_plugin.viewer.layer_frame import LayerFrame
from ct_measure_plugin.viewer.layers import placement_of
from ct_measure_plugin.viewer.outlines import add_outlines, outlines_of
from ct_measure_plugin.viewer.shapes import drawn_on, new_regions_layer

MM = 1e-4  # napari keeps corners in float32; places here are below 100 mm


@pytest.fixture
def scene(viewer_model):
    """An image of stretched pixels, rows of 1 mm and columns of 0.5 mm, origin off zero."""
    image = viewer_model.add_image(
        np.zeros((8, 60, 120)), scale=(2.0, 1.0, 0.5), translate=(5.0, -10.0, 20.0), units="mm"
    )
    return viewer_model, image, placement_of(image)


def drawn_disc(scene, center, radius, k=2, layer=None, **features):
    viewer, image, placement = scene
    layer = new_regions_layer(viewer, image) if layer is None else layer
    frame = LayerFrame(layer, placement, viewer.dims.point)
    y, x = center
    square = [(-radius, -radius), (-radius, radius), (radius, radius), (radius, -radius)]
    layer.add(frame.from_planes([[k, y + i, x + j] for i, j in square]), shape_type="ellipse")
    layer.features = {name: [value] for name, value in features.items()}
    return layer, frame, list(outlines_of(layer, [0]).values())


def discs(scene, layer):
    viewer, _, placement = scene
    return [one.region for one in drawn_on(layer, placement, viewer.dims.point)]


def test_a_mirrored_region_lies_as_far_beyond_the_line(scene):
    layer, frame, outlines = drawn_disc(scene, (8.0, 30.0), 4.0)
    for across, expected in (("vertical", (8.0, 70.0)), ("horizontal", (22.0, 30.0))):
        add_outlines(layer, arranging.mirror(frame, outlines, (15.0, 50.0), across))
        last = discs(scene, layer)[-1]
        assert last.center_mm == pytest.approx(expected, abs=MM)
        assert last.radius_mm == pytest.approx(4.0, abs=MM)


def test_rows_and_columns_have_their_steps_in_mm(scene):
    layer, frame, outlines = drawn_disc(scene, (0.0, 30.0), 2.0, name="rod")
    add_outlines(layer, arranging.array(frame, outlines, 2, 3, (10.0, 7.0)))
    found = discs(scene, layer)
    centers = [one.center_mm for one in found]
    expected = [(10.0 * i, 30.0 + 7.0 * j) for i in range(2) for j in range(3)]
    assert np.allclose(centers, expected, atol=MM)
    assert [one.name for one in found] == ["rod", "rod 2", "rod 3", "rod 4", "rod 5", "rod 6"]


@pytest.mark.parametrize("turned", [True, False])
def test_a_ring_is_a_circle_in_mm_on_stretched_pixels(scene, turned):
    """Six places of 60° around (20, 50), counter-clockwise: the second is higher on the screen."""
    layer, frame, outlines = drawn_disc(scene, (20.0, 62.0), 2.0)
    add_outlines(layer, arranging.ring(frame, outlines, 6, (20.0, 50.0), turned=turned))
    found = discs(scene, layer)
    expected = [
        (20.0 - 12 * math.sin(n * math.pi / 3), 50.0 + 12 * math.cos(n * math.pi / 3))
        for n in range(6)
    ]
    assert np.allclose([one.center_mm for one in found], expected, atol=MM)
    assert np.allclose([one.radius_mm for one in found], 2.0, atol=MM)


def test_a_turned_ring_turns_the_shapes_with_their_place(scene):
    """A box of 2 by 8 mm, a quarter turn on: it stands on end; moved only, it lies."""
    viewer, image, placement = scene
    sides = {}
    for turned in (True, False):
        layer = new_regions_layer(viewer, image)
        frame = LayerFrame(layer, placement, viewer.dims.point)
        corners = [[2, 19, 60], [2, 19, 68], [2, 21, 68], [2, 21, 60]]
        layer.add(frame.from_planes(corners), shape_type="rectangle")
        outlines = list(outlines_of(layer, [0]).values())
        add_outlines(layer, arranging.ring(frame, outlines, 4, (20.0, 50.0), turned=turned))
        planes = frame.planes(frame.voxels(layer.data[1]))[:, 1:]
        sides[turned] = np.ptp(planes, axis=0)
    assert sides[True] == pytest.approx([8.0, 2.0], abs=MM)
    assert sides[False] == pytest.approx([2.0, 8.0], abs=MM)


def test_copies_on_slices_take_their_range_along(scene):
    """Slices of 2 mm; the original on slice 2 reaches from 7 to 11 mm."""
    layer, frame, outlines = drawn_disc(
        scene, (8.0, 30.0), 4.0, z_low_mm=7.0, z_high_mm=11.0, ct_mean=3.5, name="rod"
    )
    copies = arranging.on_slices(frame, outlines, [2, 3, 6])
    assert [one.features["z_low_mm"] for one in copies] == [9.0, 15.0]
    add_outlines(layer, copies)
    found = discs(scene, layer)
    assert [one.z_mm for one in found] == [(7.0, 11.0), (9.0, 13.0), (15.0, 19.0)]
    assert {one.name for one in found} == {"rod"}
    assert math.isnan(layer.features["ct_mean"].iloc[1])
    assert len(set(layer.features["region_id"])) == 3


def test_a_flat_layer_has_no_slices_to_copy_to(scene):
    viewer, _, placement = scene
    layer = viewer.add_shapes(
        [np.array([[0, 25], [0, 35], [10, 35], [10, 25]])], shape_type="ellipse", units="mm"
    )
    frame = LayerFrame(layer, placement, viewer.dims.point)
    with pytest.raises(ArgumentError, match="a flat one lies on every slice"):
        arranging.on_slices(frame, list(outlines_of(layer, [0]).values()), [1, 2])


def test_a_copy_on_a_layer_of_other_units_lies_in_the_same_place(scene):
    """The other layer counts in tenths of a millimetre from a corner of its own."""
    viewer, _, placement = scene
    _, frame, outlines = drawn_disc(scene, (8.0, 30.0), 4.0, k=3)
    other = viewer.add_shapes(ndim=3, scale=(0.1, 0.1, 0.1), translate=(3.0, 2.0, 1.0), units="mm")
    to = LayerFrame(other, placement, viewer.dims.point)
    add_outlines(other, arranging.onto(frame, to, outlines))
    [found] = discs(scene, other)
    assert found.center_mm == pytest.approx((8.0, 30.0), abs=1e-3)
    assert found.radius_mm == pytest.approx(4.0, abs=1e-3)
    assert found.z_mm == 11.0
    assert other.edge_width[0] == pytest.approx(math.sqrt(0.5) / 0.1)


@pytest.mark.parametrize(
    ("act", "text"),
    [
        (lambda f, o: arranging.array(f, o, 1, 1, (5.0, 5.0)), "must make 1 to 2000 copies"),
        (lambda f, o: arranging.array(f, o, 100, 100, (5.0, 5.0)), "must make 1 to 2000 copies"),
        (lambda f, o: arranging.array(f, o, 2, 2, (0.0, 5.0)), "copies lie on one another"),
        (lambda f, o: arranging.ring(f, o, 1, (0.0, 0.0)), "must make 1 to 2000 copies"),
        (lambda f, o: arranging.on_slices(f, o, [2]), "must make 1 to 2000 copies"),
    ],
)
def test_slips_of_the_hand_are_refused(scene, act, text):
    _, frame, outlines = drawn_disc(scene, (8.0, 30.0), 4.0)
    with pytest.raises(ArgumentError, match=text):
        act(frame, outlines)
