"""Labels as regions: where they lie, and what a brush, a fill or an undo changes."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.measurements import measure
from ct_measure_plugin.viewer import labels as labels_module
from ct_measure_plugin.viewer.labels import LabelRegions
from ct_measure_plugin.viewer.layers import layer_of, placement_of

EVENTS = ("labels_update", "paint", "set_data", "data")


class Scene:
    """A painted layer on the volume, its regions told of everything, as a dock tells them."""

    def __init__(self, viewer, volume, data, **more):
        image_data, attributes, _ = layer_of(volume, "CT")
        self.viewer, self.volume = viewer, volume
        self.image = viewer.add_image(image_data, **attributes)
        self.placement = placement_of(self.image)
        placed = {
            "scale": self.image.scale[-data.ndim :],
            "translate": self.image.translate[-data.ndim :],
            "units": "mm",
        }
        self.layer = viewer.add_labels(data, **(placed | more))
        self.regions = LabelRegions(self.layer)
        self.layer.events.labels_update.connect(self.regions.stroke)
        self.layer.events.paint.connect(self.regions.painted)
        self.layer.events.set_data.connect(
            lambda _event: self.regions.refreshed(self.viewer.dims.point)
        )
        self.layer.events.data.connect(lambda _event: self.regions.replaced())

    def drawn(self, **more):
        found = self.regions.drawn(self.placement, self.viewer.dims.point, **more)
        return {one.index: one for one in found}


@pytest.fixture
def deep(viewer_model, volume):
    data = np.zeros(volume.shape, np.int32)
    data[1:4, 5:15, 10:20] = 1
    data[2:5, 20:30, 10:40] = 7
    return Scene(viewer_model, volume, data)


def pixels_of(scene, label):
    hu, data = scene.volume.hu, scene.layer.data
    return np.asarray(hu)[data == label]


def test_a_label_is_measured_where_it_is_painted(deep):
    """Numbers straight from the arrays: the same grid leaves no border to share."""
    found = deep.drawn()
    assert sorted(found) == [1, 7]
    for label, one in found.items():
        answer = measure("region_statistics", deep.volume, one.region)
        pixels = pixels_of(deep, label)
        assert answer.n.value == pixels.size
        assert answer.mean.value == pytest.approx(pixels.mean(), rel=1e-12)
        assert answer.volume.value == pytest.approx(pixels.size * 2.5 * 0.7 * 0.7)


def test_a_stroke_changes_the_labels_it_touches_and_no_other(deep):
    before = deep.drawn()
    deep.viewer.dims.set_point(0, deep.volume.positions_mm[2])
    deep.drawn()
    deep.layer.brush_size = 4
    deep.layer.paint((2, 12, 18), 1)
    after = deep.drawn()
    assert after[7].region is before[7].region
    assert after[1].region is not before[1].region
    assert measure("region_statistics", deep.volume, after[1].region).n.value == (
        pixels_of(deep, 1).size
    )


def test_a_new_label_an_erased_one_and_a_fill(deep):
    deep.drawn()
    deep.viewer.dims.set_point(0, deep.volume.positions_mm[2])
    deep.drawn()
    deep.layer.brush_size = 6
    deep.layer.paint((2, 34, 5), 9)
    assert sorted(deep.drawn()) == [1, 7, 9]
    deep.layer.n_edit_dimensions = 3
    deep.layer.fill((2, 10, 12), 0)
    assert sorted(deep.drawn()) == [7, 9]
    deep.layer.fill((3, 25, 12), 4)
    assert sorted(deep.drawn()) == [4, 9]


def test_an_undo_is_noticed_though_napari_does_not_tell_of_it(deep):
    deep.drawn()
    deep.viewer.dims.set_point(0, deep.volume.positions_mm[2])
    deep.drawn()
    deep.layer.paint((2, 34, 5), 9)
    assert 9 in deep.drawn()
    deep.layer.undo()
    assert sorted(deep.drawn()) == [1, 7]


def test_another_slice_is_no_reason_to_look_again(deep, monkeypatch):
    deep.drawn()
    monkeypatch.setattr(labels_module, "_look_through", None)
    deep.viewer.dims.set_point(0, deep.volume.positions_mm[4])
    assert sorted(deep.drawn()) == [1, 7]


def test_looking_again_keeps_the_masks_that_did_not_change(deep):
    before = deep.drawn()
    deep.regions.replaced()
    after = deep.drawn()
    assert all(after[label].region is before[label].region for label in before)


def test_a_mirrored_map_lies_where_it_is_shown(viewer_model, volume):
    """z runs downwards and x to the left: the voxel shown at a place is the voxel measured."""
    data = np.zeros(volume.shape, np.int32)
    data[0:2, 5:15, 0:10] = 3
    dz, dy, dx = volume.spacing_mm
    nz, _, nx = volume.shape
    z, y, x = volume.origin_mm
    scene = Scene(
        viewer_model, volume, data, scale=(-dz, dy, -dx),
        translate=(z + (nz - 1) * dz, y, x + (nx - 1) * dx),
    )  # fmt: skip
    [one] = scene.drawn().values()
    answer = measure("region_statistics", volume, one.region)
    pixels = volume.hu[::-1, :, ::-1][data == 3]
    assert answer.n.value == pixels.size
    assert answer.mean.value == pytest.approx(pixels.mean(), rel=1e-12)
    scene.viewer.dims.set_point(0, scene.layer.data_to_world((1, 0, 0))[0])
    scene.drawn()
    scene.layer.paint((1, 8, 12), 3)
    [after] = scene.drawn().values()
    assert measure("region_statistics", volume, after.region).n.value == (
        np.count_nonzero(scene.layer.data == 3)
    )


def test_a_coarser_map_measures_the_same_place(viewer_model, volume):
    """Voxels of twice the size in every direction, centred on two by two by two of the image's."""
    data = np.zeros((3, 20, 25), np.uint8)
    data[1, 4:9, 5:12] = 2
    scale = np.array(volume.spacing_mm) * 2
    translate = np.array(volume.origin_mm) + np.array(volume.spacing_mm) / 2
    scene = Scene(viewer_model, volume, data, scale=scale, translate=translate)
    [one] = scene.drawn().values()
    answer = measure("region_statistics", volume, one.region)
    pixels = volume.hu[2:4, 8:18, 10:24]
    assert answer.volume.value == pytest.approx(35 * np.prod(scale))
    assert answer.mean.value == pytest.approx(pixels.mean(), rel=1e-9)


def test_a_flat_map_is_measured_on_the_slice_shown(viewer_model, volume):
    data = np.zeros(volume.shape[1:], np.uint8)
    data[5:15, 10:20] = 1
    scene = Scene(viewer_model, volume, data)
    for k in (1, 4):
        scene.viewer.dims.set_point(0, volume.positions_mm[k])
        [one] = scene.drawn().values()
        answer = measure("region_statistics", volume, one.region)
        assert answer.mean.value == pytest.approx(volume.hu[k, 5:15, 10:20].mean(), rel=1e-12)


def test_a_turned_map_says_so(viewer_model, volume):
    data = np.ones(volume.shape, np.uint8)
    scene = Scene(viewer_model, volume, data, rotate=20.0)
    [one] = scene.drawn().values()
    assert one.region is None
    assert "turned against the image" in one.problem


def test_a_large_map_is_looked_through_elsewhere(deep, monkeypatch, qtbot):
    """Nothing is lost meanwhile: what was known stays, what is painted comes after."""
    monkeypatch.setattr(labels_module, "SOON", 0)
    assert deep.drawn() == {}
    assert deep.regions.busy
    qtbot.waitUntil(lambda: sorted(deep.drawn()) == [1, 7], timeout=5000)
    told = []
    deep.regions.changed.connect(lambda: told.append(1))
    deep.viewer.dims.set_point(0, deep.volume.positions_mm[2])
    deep.drawn()
    deep.layer.paint((2, 34, 5), 9)
    assert sorted(deep.drawn()) == [1, 7]
    qtbot.waitUntil(lambda: sorted(deep.drawn()) == [1, 7, 9], timeout=5000)
    assert told
    assert sorted(deep.drawn(wait=True)) == [1, 7, 9]
    deep.regions.close()
