"""Regions and labels go out and come back as they were; DICOM is read back by pydicom."""

from __future__ import annotations

import numpy as np
import pydicom
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.measurements import find
from ct_measure_plugin.physics.regions import Box, Disc, Mask, Polygon
from ct_measure_plugin.records import read_regions, write_regions
from ct_measure_plugin.viewer.layers import layer_of
from ct_measure_plugin.viewer.loading import entries_at, layers_of
from ct_measure_plugin.viewer.region_acts import RegionActs
from ct_measure_plugin.viewer.region_board import RegionBoard
from ct_measure_plugin.viewer.region_exchange import (
    entry_of,
    open_regions,
    open_segmentation,
    save_regions,
    save_report,
    save_segmentation,
)
from ct_measure_plugin.viewer.region_features import set_column
from ct_measure_plugin.viewer.region_source import source_of
from ct_measure_plugin.viewer.session import Session
from ct_measure_plugin.viewer.shapes import new_regions_layer
from ct_measure_plugin.virtual_scanner import samples

NAME = "region_statistics"


class Scene:
    def __init__(self, viewer, image):
        self.viewer, self.image = viewer, image
        self.board = RegionBoard(Session.of(viewer), NAME)
        self.board.settings = find(NAME).settings_type()
        self.board.images = (image,)
        self.acts = RegionActs(self.board, viewer)
        self.placement = self.board.placement()
        self.use(new_regions_layer(viewer, image))

    def use(self, layer):
        self.layer = layer
        self.board.source = source_of(layer, self.viewer)
        self.board.look()

    @property
    def point(self):
        return self.viewer.dims.point


@pytest.fixture
def scene(viewer_model, volume):
    data, attributes, _ = layer_of(volume, "CT")
    image = viewer_model.add_image(data, **attributes)
    viewer_model.dims.set_point(0, volume.positions_mm[2])
    made = Scene(viewer_model, image)
    yield made
    made.board.stop()


@pytest.fixture
def sample(viewer_model):
    """A simulated series on disk, opened as napari opens a folder."""
    folder = samples.folder("standard")
    [(data, attributes, _)] = layers_of(entries_at([folder]))
    from napari.layers import Image
    from napari.layers._source import layer_source

    with layer_source(path=str(folder)):
        image = viewer_model.add_layer(Image(data, **attributes))
    made = Scene(viewer_model, image)
    yield made
    made.board.stop()


REGIONS = (
    Disc((0.0, 24.0), 5.0, z_mm=-15.0, name="a", group="rod", code="SCT:1", values=(0.0, 90.0)),
    Box((1.0, 20.0), (4.0, 9.0), 30.0, z_mm=(-17.5, -10.0), name="b"),
    Polygon(((0.0, 10.0), (5.0, 20.0), (-4.0, 22.0)), name="c"),
)


def test_regions_come_back_from_their_file(scene, tmp_path):
    scene.acts.add(REGIONS)
    scene.board.look()
    path = save_regions(scene.board, tmp_path / "set.regions.json")
    stored = read_regions(path).regions
    assert [one.name for one in stored] == ["a", "b", "c"]
    scene.acts.delete([0, 1, 2])
    count, remark = open_regions(scene.acts, scene.board, scene.viewer, path)
    assert (count, remark) == (3, "")
    scene.board.look()
    for one, again in zip(stored, (drawn.region for drawn in scene.board.drawn), strict=True):
        assert type(one) is type(again)
        for word in ("name", "group", "code", "values", "z_mm"):
            assert getattr(again, word) == getattr(one, word)
        assert again.area_mm2 == pytest.approx(one.area_mm2, rel=1e-5)
    assert scene.acts.undo.next_undo == "open 3 regions"


def test_masks_come_back_as_labels(scene, tmp_path):
    inside = np.zeros((2, 10, 12), bool)
    inside[0, 2:8, 3:9] = inside[1, 4:6, 3:9] = True
    volume = scene.placement.volume
    mask = Mask(
        inside, volume.spacing_mm, (-17.5, -14.0 + 5 * 0.7, 7.0 + 6 * 0.7), name="m", group="g"
    )
    path = write_regions([mask], tmp_path / "m.regions.json", volume=volume, title="labels")
    open_regions(scene.acts, scene.board, scene.viewer, path)
    layer = scene.viewer.layers["labels"]
    assert np.array_equal(layer.data[1:3, 5:15, 6:18] == 1, inside)
    assert np.count_nonzero(layer.data) == np.count_nonzero(inside)
    assert layer.features.set_index("index").loc[1, "name"] == "m"


def test_regions_of_another_frame_say_so(scene, sample, tmp_path):
    """Drawn on a plain array, opened on a series with a patient frame."""
    scene.acts.add(REGIONS[:1])
    scene.board.look()
    path = save_regions(scene.board, tmp_path / "set.regions.json")
    y, x = sample.acts.middle()
    write_regions([Disc((y, x), 5.0, z_mm=sample.acts.here())], path)
    _, remark = open_regions(sample.acts, sample.board, sample.viewer, path)
    assert "frame of a plain array" in remark


def test_labels_go_out_and_come_back_as_a_dicom_segmentation(sample, tmp_path):
    y, x = sample.acts.middle()
    z = sample.acts.here()
    sample.acts.add(
        [
            Disc((y, x), 12.0, z_mm=(z, z + 5.0), name="water", group="Water", code="SCT:11713004"),
            Disc((y - 40, x), 8.0, z_mm=z, name="spot"),
        ]
    )
    sample.board.look()
    labels = sample.acts.to_labels([0, 1])
    path = save_segmentation(
        labels, sample.placement, sample.point, tmp_path / "s.dcm", anonymous=True
    )
    ds = pydicom.dcmread(path)
    assert ds.Modality == "SEG"
    names = [item.SegmentLabel for item in ds.SegmentSequence]
    assert names == ["water", "spot"]
    kind = ds.SegmentSequence[0].SegmentedPropertyTypeCodeSequence[0]
    assert (kind.CodeValue, kind.CodingSchemeDesignator) == ("11713004", "SCT")
    again, remark = open_segmentation(path, sample.placement, sample.viewer)
    assert remark == ""
    assert np.array_equal(again.data, labels.data)
    stored = again.features.set_index("index")
    assert list(stored["name"]) == ["water", "spot"]
    assert stored.loc[1, "code"] == "SCT:11713004"


def test_numbers_go_out_as_a_dicom_report(sample, tmp_path):
    y, x = sample.acts.middle()
    sample.acts.add([Disc((y, x), 12.0, z_mm=sample.acts.here(), name="water")])
    sample.board.look()
    path = save_report(sample.board, tmp_path / "r.dcm", anonymous=True)
    ds = pydicom.dcmread(path)
    assert ds.Modality == "SR"
    mean = sample.board.rows[0].answer.mean.value
    values = [
        float(item.MeasuredValueSequence[0].NumericValue)
        for item in _items(ds)
        if item.ValueType == "NUM"
    ]
    assert any(value == pytest.approx(mean, rel=1e-6) for value in values)


def _items(ds):
    for item in ds.get("ContentSequence", ()):
        yield item
        yield from _items(item)


def test_the_series_of_an_image_is_found_again(sample, scene):
    entry = entry_of(sample.image)
    assert entry.digest == sample.placement.volume.source.series_digest
    with pytest.raises(ArgumentError, match="opened from a folder"):
        entry_of(scene.image)


def test_labels_of_other_voxels_are_not_written(sample, tmp_path):
    other = sample.viewer.add_labels(np.ones((3, 20, 20), int), scale=(5.0, 2.0, 2.0), units="mm")
    with pytest.raises(ArgumentError, match="the image's own voxels"):
        save_segmentation(other, sample.placement, sample.point, tmp_path / "s.dcm", anonymous=True)
    assert not list(tmp_path.iterdir())


def test_a_label_without_a_name_is_called_by_its_number(sample, tmp_path):
    layer = sample.viewer.add_labels(
        np.zeros(sample.placement.volume.shape, np.uint8),
        scale=sample.image.scale, translate=sample.image.translate, units="mm",
    )  # fmt: skip
    layer.data[3, 100:120, 100:120] = 5
    set_column(layer, "class", {5: "artefact"}, keys=[5])
    path = save_segmentation(
        layer, sample.placement, sample.point, tmp_path / "s.dcm", anonymous=True
    )
    assert pydicom.dcmread(path).SegmentSequence[0].SegmentLabel == "artefact"
    again, _ = open_segmentation(path, sample.placement, sample.viewer)
    assert set(np.unique(again.data)) == {0, 5}
