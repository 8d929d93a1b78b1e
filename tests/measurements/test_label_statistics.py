"""A label map on a Volume: on its grid, on another, and what is wrong with it."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from ct_measure_plugin.errors import RegionError
from ct_measure_plugin.measurements import measure, measure_each
from ct_measure_plugin.physics.regions import Disc, Labels
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.volume import Volume

SPACING = (2.0, 0.5, 0.5)


def volume(**more) -> Volume:
    hu = np.rint(np.random.default_rng(61).normal(20, 10, (4, 50, 60))).astype(np.int16)
    return Volume(hu, SPACING, origin_mm=(10.0, -5.0, 3.0), **more)


def painted() -> np.ndarray:
    labels = np.zeros((4, 50, 60), np.uint8)
    labels[1:4, 10:30, 5:40], labels[0, 35:45, 20:50] = 4, 9
    return labels


def map_of(labels, spacing=SPACING, origin=(10.0, -5.0, 3.0), **more) -> Labels:
    return Labels(labels, spacing, origin, **more)


def said(result) -> dict[str, str]:
    return {caution.code: caution.text for caution in result.cautions}


def test_region_statistics_of_a_map_are_those_of_its_labels():
    """A map measured as regions gives one answer a label, with the table's numbers."""
    labels = map_of(painted(), names=((9, "slab"),))
    table = measure("label_statistics", volume(), labels)
    answers = measure_each("region_statistics", volume(), labels)
    assert [row.name for row in table.labels] == ["label 4", "slab"]
    assert len(answers) == len(table.labels) == 2
    for row, answer in zip(table.labels, answers, strict=True):
        for name in ("mean", "sd", "median", "p10", "skewness", "n"):
            mine, twin = getattr(row, name), getattr(answer, name)
            assert mine.value == pytest.approx(twin.value, rel=1e-9)
            if name != "n":
                assert mine.uncertainty == pytest.approx(twin.uncertainty, rel=1e-6)
    assert table.labels[0].size == answers[0].volume


def test_a_map_on_the_volumes_grid_is_taken_as_it_is():
    found = measure("label_statistics", volume(), map_of(painted()))
    assert "labels-resampled" not in said(found)
    own = volume().hu[painted() == 4]
    assert found.labels[0].mean.value == pytest.approx(own.mean(), rel=1e-12)
    assert found.n.value == np.count_nonzero(painted())


def test_a_part_of_the_grid_lies_where_its_origin_says():
    whole = painted()
    part = map_of(whole[1:4, 8:40, 4:45], origin=(12.0, -5.0 + 8 * 0.5, 3.0 + 4 * 0.5))
    found = measure("label_statistics", volume(), part)
    assert "labels-resampled" not in said(found)
    own = volume().hu[whole == 4]
    assert found.labels[0].mean.value == pytest.approx(own.mean(), rel=1e-12)


def test_a_map_of_another_spacing_gives_each_voxel_the_label_at_its_centre():
    fine = painted().repeat(2, axis=1).repeat(2, axis=2)
    origin = (10.0, -5.0 - 0.125, 3.0 - 0.125)
    found = measure("label_statistics", volume(), map_of(fine, (2.0, 0.25, 0.25), origin))
    assert "has its own grid" in said(found)["labels-resampled"]
    assert found.labels[0].mean.value == pytest.approx(volume().hu[painted() == 4].mean())
    assert found.n.value == np.count_nonzero(painted())


def test_labels_outside_the_volume_are_told():
    labels = np.zeros((4, 50, 60), np.uint8)
    labels[1, :, 20:40] = 1
    moved = map_of(labels, origin=(10.0, -5.0 + 25 * 0.5, 3.0))
    found = measure("label_statistics", volume(), moved)
    assert found.labels[0].n.value == 25 * 20
    assert "50.0 % of the region lies outside" in said(found)["outside-image"]
    gone = measure("label_statistics", volume(), map_of(labels, origin=(10.0, 900.0, 3.0)))
    assert isinstance(gone, NotMeasured)
    assert gone.reason == "the labels lie outside the volume"


def test_an_empty_map_has_an_answer():
    found = measure("label_statistics", volume(), map_of(np.zeros((4, 50, 60), int)))
    assert isinstance(found, NotMeasured)
    assert found.reason == "the label map holds no label"
    assert measure_each("region_statistics", volume(), [Disc((0, 10), 3, z_mm=12.0)])
    with pytest.raises(RegionError, match="must hold a label map with labels, got 'an empty map'"):
        measure("region_statistics", volume(), map_of(np.zeros((4, 50, 60), int)))


def test_saturation_padding_and_thresholds_leave_the_labels():
    hu = volume().hu.copy()
    hu[1, 10:12, 5:10], hu[0, 35, 20:24] = 3071, -2000
    held = Volume(
        hu,
        SPACING,
        origin_mm=(10.0, -5.0, 3.0),
        representable_hu=(-3000.0, 3071.0),
        padding_hu=np.tile([-2000.0, -2000.0], (4, 1)),
    )
    found = measure("label_statistics", held, map_of(painted()))
    assert "10 of" in said(found)["clipped-values"]
    assert said(found)["padding-excluded"].startswith("4 pixels")
    assert found.n.value == np.count_nonzero(painted()) - 14
    assert found.labels[0].maximum.value < 3071
    high = measure("label_statistics", volume(), map_of(painted(), values=(20.0, 500.0)))
    assert high.labels[0].minimum.value == 20.0
    assert "Only values from 20 to 500 count" in said(high)["threshold"]


def test_a_flat_map_lies_on_the_slice_it_names():
    flat = map_of(painted()[1], z_mm=12.0)
    found = measure("label_statistics", volume(), flat)
    assert found.labels[0].n.value == np.count_nonzero(painted()[1])
    everywhere = measure("label_statistics", volume(), replace(flat, z_mm=None))
    assert everywhere.labels[0].n.value == 4 * found.labels[0].n.value


def test_one_slice_has_areas():
    one = Volume(volume().hu[1], (1.0, 0.5, 0.5))
    found = measure("label_statistics", one, Labels(painted()[1], (1.0, 0.5, 0.5)))
    assert found.size.unit == found.labels[0].size.unit == "mm²"
    assert found.size.value == pytest.approx(np.count_nonzero(painted()[1]) * 0.25)


def test_other_regions_are_refused():
    with pytest.raises(RegionError, match="must be of kind labels"):
        measure("label_statistics", volume(), Disc((0, 10), 3))
