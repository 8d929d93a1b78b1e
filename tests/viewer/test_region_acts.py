"""What a dock does to regions is seen on the layer, and can be undone."""

from __future__ import annotations

import math

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.measurements import find, measure
from ct_measure_plugin.physics.regions import Box, Disc, Ellipsoid, Mask, Path, Polygon, Segment
from ct_measure_plugin.viewer.layers import layer_of
from ct_measure_plugin.viewer.region_acts import RegionActs
from ct_measure_plugin.viewer.region_board import RegionBoard
from ct_measure_plugin.viewer.region_source import source_of
from ct_measure_plugin.viewer.session import Session
from ct_measure_plugin.viewer.shapes import new_regions_layer

NAME = "region_statistics"
MM = 1e-4  # float32 corners below 100 mm


class Scene:
    def __init__(self, viewer, volume):
        data, attributes, _ = layer_of(volume, "CT")
        self.viewer, self.volume = viewer, volume
        self.image = viewer.add_image(data, **attributes)
        viewer.dims.set_point(0, volume.positions_mm[2])
        self.board = RegionBoard(Session.of(viewer), NAME)
        self.board.settings = find(NAME).settings_type()
        self.board.images = (self.image,)
        self.acts = RegionActs(self.board, viewer)
        self.use(new_regions_layer(viewer, self.image))

    def use(self, layer):
        self.layer = layer
        self.board.source = source_of(layer, self.viewer)
        self.board.look()

    def regions(self):
        self.board.look()
        return [one.region for one in self.board.drawn]

    def add(self, *regions):
        self.acts.add(regions)
        return self.regions()


@pytest.fixture
def scene(viewer_model, volume):
    made = Scene(viewer_model, volume)
    yield made
    made.board.stop()


@pytest.mark.parametrize(
    "region",
    [
        Disc((0.0, 24.0), 5.0, z_mm=-15.0, name="a", group="g", code="SCT:1", values=(0.0, 50.0)),
        Box((1.0, 20.0), (4.0, 9.0), 30.0, z_mm=(-17.5, -10.0), name="b"),
        Polygon(((0.0, 10.0), (5.0, 20.0), (-4.0, 22.0)), z_mm=None, name="c"),
        Segment((0.0, 10.0), (5.0, 30.0), 2.0, z_mm=-10.0, name="d"),
        Path(((0.0, 10.0), (5.0, 30.0), (-4.0, 22.0)), 2.0, z_mm=-10.0, name="p"),
        Ellipsoid((0.0, 24.0), (3.0, 5.0), 5.0, 40.0, z_mm=-12.5, name="e"),
    ],
    ids=lambda region: region.kind,
)
def test_a_region_typed_in_mm_is_drawn_as_it_was_typed(scene, region):
    [found] = scene.add(region)
    assert type(found) is type(region)
    for word in ("name", "group", "code", "values", "z_mm"):
        assert getattr(found, word) == getattr(region, word), word
    for number in ("center_mm", "radius_mm", "size_mm", "radii_mm", "angle_deg", "width_mm",
                   "start_mm", "end_mm", "z_radius_mm"):  # fmt: skip
        if hasattr(region, number):
            assert getattr(found, number) == pytest.approx(getattr(region, number), abs=2e-3)
    if isinstance(region, Polygon):
        assert np.allclose(found.vertices_mm, region.vertices_mm, atol=MM)
    assert scene.layer.selected_data == {0}
    scene.acts.undo.undo()
    assert scene.layer.nshapes == 0


def test_delete_and_undo(scene):
    scene.add(Disc((0.0, 18.0), 4.0, z_mm=-15.0, name="a"))
    scene.add(Disc((0.0, 30.0), 4.0, z_mm=-15.0, name="b"))
    scene.acts.delete([0])
    assert [one.name for one in scene.regions()] == ["b"]
    assert scene.acts.undo.next_undo == "delete 1 region"
    scene.acts.undo.undo()
    assert sorted(one.name for one in scene.regions()) == ["a", "b"]


def test_move_mirror_and_back(scene):
    scene.add(Disc((2.0, 18.0), 3.0, z_mm=-15.0))
    scene.acts.shift([0], (1.0, 4.0))
    assert scene.regions()[0].center_mm == pytest.approx((3.0, 22.0), abs=MM)
    scene.acts.mirror([0], "vertical", "image", keep=False)
    y, x = scene.acts.middle()
    assert (y, x) == pytest.approx((-14.0 + 0.7 * 19.5, 7.0 + 0.7 * 24.5))
    assert scene.regions()[0].center_mm == pytest.approx((3.0, 2 * x - 22.0), abs=MM)
    scene.acts.undo.undo()
    scene.acts.undo.undo()
    assert scene.regions()[0].center_mm == pytest.approx((2.0, 18.0), abs=MM)
    scene.acts.mirror([0], "horizontal", "image", keep=True)
    centers = [one.center_mm for one in scene.regions()]
    assert np.allclose(centers, [(2.0, 18.0), (2 * y - 2.0, 18.0)], atol=MM)


def test_array_ring_and_slices(scene):
    scene.add(Disc((-6.0, 14.0), 2.0, z_mm=-15.0))
    scene.acts.array([0], 2, 2, (9.0, 10.0))
    assert len(scene.regions()) == 4
    scene.acts.undo.undo()
    scene.acts.ring([0], 5, scene.acts.middle(), turned=True)
    assert len(scene.regions()) == 5
    scene.acts.undo.undo()
    scene.acts.to_slices([0], 0, 3)
    assert sorted(one.z_mm for one in scene.regions()) == [-20.0, -17.5, -15.0, -12.5]
    scene.acts.undo.undo()
    assert len(scene.regions()) == 1
    scene.acts.undo.redo()
    assert len(scene.regions()) == 4


def test_copies_on_another_layer(scene):
    other = scene.viewer.add_points(ndim=3, units="mm", scale=(1.0, 1.0, 1.0))
    scene.add(Disc((0.0, 24.0), 5.0, z_mm=-15.0, name="a"))
    scene.acts.to_layer([0], other)
    assert other.data[0].tolist() == pytest.approx([-15.0, 0.0, 24.0], abs=MM)
    assert other.features["name"].iloc[0] == "a"
    scene.acts.undo.undo()
    assert len(other.data) == 0


def test_reach_and_count(scene):
    scene.add(Disc((0.0, 24.0), 5.0, z_mm=-15.0), Disc((0.0, 30.0), 5.0, z_mm=-15.0))
    scene.acts.reach([0], -20.0, -10.0, "ellipsoid")
    scene.acts.count([1], 30.0, math.nan)
    first, second = scene.regions()
    assert isinstance(first, Ellipsoid)
    assert first.z_radius_mm == 6.25
    assert second.values == (30.0, math.inf)


def test_reshape_keeps_name_and_class(scene):
    scene.add(Disc((0.0, 24.0), 5.0, z_mm=-15.0, name="a", group="g"))
    scene.acts.reshape(0, Box((1.0, 20.0), (4.0, 9.0), z_mm=-15.0))
    [found] = scene.regions()
    assert isinstance(found, Box)
    assert (found.name, found.group) == ("a", "g")
    scene.acts.undo.undo()
    assert isinstance(scene.regions()[0], Disc)


def test_regions_are_painted_as_labels_and_come_back(scene):
    scene.add(
        Disc((0.0, 20.0), 5.0, z_mm=(-17.5, -12.5), name="a", group="g", code="SCT:1"),
        Disc((0.0, 34.0), 4.0, z_mm=-15.0, name="b", values=(40.0, math.inf)),
    )
    labels = scene.acts.to_labels([0, 1])
    hu = np.asarray(scene.volume.hu)
    assert (hu[labels.data == 2] >= 40).all()
    expected = measure(NAME, scene.volume, scene.board.drawn[1].region, coverage="center")
    assert np.count_nonzero(labels.data == 2) == expected.n.value
    assert labels.data[0].max() == labels.data[4].max() == 0
    scene.use(labels)
    assert [(one.name, one.group, one.code) for one in scene.board.drawn] == [
        ("a", "g", "SCT:1"),
        ("b", "", ""),
    ]
    scene.acts.delete([1])
    assert [one.index for one in scene.board.drawn if one.index == 1]
    scene.board.source.note(type("Event", (), {"type": "data"}))
    assert [one.name for one in scene.regions()] == ["b"]
    scene.acts.undo.undo()
    assert np.count_nonzero(labels.data == 1) > 0
    scene.acts.undo.undo()
    assert labels.data.max() == 0


def test_painting_goes_on_from_the_highest_label(scene):
    scene.add(Disc((0.0, 20.0), 5.0, z_mm=-15.0))
    labels = scene.acts.to_labels([0])
    scene.acts.to_labels([0], labels)
    assert labels.data.max() == 2


@pytest.mark.parametrize(
    ("act", "text"),
    [
        (lambda s: s.acts.add([Mask(np.ones((3, 3), bool), (1, 1, 1), z_mm=-15.0)]), "an outline"),
        (lambda s: s.acts.add([Disc((0.0, 24.0), 5.0, z_mm=500.0)]), "within the image's slices"),
        (lambda s: s.acts.array([], 2, 2, (5.0, 5.0)), "must be chosen in the list first"),
        (lambda s: s.acts.shift([], (1.0, 1.0)), "must be chosen in the list first"),
        (lambda s: s.acts.to_labels([]), "must be chosen in the list first"),
    ],
)
def test_what_cannot_be_done_says_why_and_leaves_nothing(scene, act, text):
    layers = len(scene.viewer.layers)
    with pytest.raises(ArgumentError, match=text):
        act(scene)
    assert scene.layer.nshapes == 0
    assert len(scene.viewer.layers) == layers


def test_labels_cannot_be_arranged(scene):
    scene.add(Disc((0.0, 20.0), 5.0, z_mm=-15.0))
    scene.use(scene.acts.to_labels([0]))
    with pytest.raises(ArgumentError, match="must hold shapes or points"):
        scene.acts.shift([1], (1.0, 1.0))


def test_a_labels_layer_of_other_voxels_is_refused(scene):
    scene.add(Disc((0.0, 20.0), 5.0, z_mm=-15.0))
    other = scene.viewer.add_labels(np.zeros((3, 20, 25), int), scale=(5.0, 1.4, 1.4))
    with pytest.raises(ArgumentError, match="the image's own voxels"):
        scene.acts.to_labels([0], other)
