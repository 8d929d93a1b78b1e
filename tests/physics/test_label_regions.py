"""Boxes and masks of labels against scikit-image's regions and the map itself."""

from __future__ import annotations

import numpy as np
import pytest
from skimage.measure import regionprops

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.label_regions import joined, label_boxes, label_mask, overlap
from ct_measure_plugin.physics.regions import Labels, Mask


def random_map(shape, labels, seed=3):
    rng = np.random.default_rng(seed)
    found = np.zeros(shape, np.int32)
    for label in labels:
        corner = [int(rng.integers(0, n - 3)) for n in shape]
        found[tuple(slice(c, c + int(rng.integers(1, 6))) for c in corner)] = label
    return found


@pytest.mark.parametrize("shape", [(40, 50), (7, 20, 30)])
def test_boxes_are_those_of_scikit_image(shape):
    labels = random_map(shape, range(1, 13))
    found = label_boxes(labels)
    expected = {one.label: one.slice for one in regionprops(labels)}
    assert found == expected


def test_huge_and_negative_numbers_are_labels_like_others():
    labels = random_map((40, 50), [-3, 5, 2_000_000_000])
    found = label_boxes(labels)
    assert set(found) == set(np.unique(labels)) - {0}
    for label, box in found.items():
        assert np.count_nonzero(labels[box] == label) == np.count_nonzero(labels == label)


def test_a_mask_holds_the_voxels_and_their_place():
    labels = random_map((7, 20, 30), [1, 2, 3])
    loose = tuple(slice(0, n) for n in labels.shape)
    for label, box in label_boxes(labels).items():
        one = label_mask(labels, label, box, spacing_mm=(2.0, 0.5, 0.7), origin_mm=(-4.0, 1.0, 2.0))
        other = label_mask(
            labels, label, loose, spacing_mm=(2.0, 0.5, 0.7), origin_mm=(-4.0, 1.0, 2.0)
        )
        where = np.argwhere(labels == label)
        assert one.origin_mm == pytest.approx(
            np.array([-4.0, 1.0, 2.0]) + where.min(axis=0) * [2.0, 0.5, 0.7]
        )
        assert np.count_nonzero(one.inside) == len(where)
        assert other.origin_mm == one.origin_mm
        assert np.array_equal(other.inside, one.inside)


def test_a_box_without_the_label_holds_no_region():
    labels = random_map((20, 30), [4])
    whole = (slice(0, 20), slice(0, 30))
    assert label_mask(labels, 9, whole, spacing_mm=(1, 1, 1)) is None


def test_an_empty_map_and_one_of_fractions():
    assert label_boxes(np.zeros((5, 5), int)) == {}
    with pytest.raises(ArgumentError, match="whole numbers"):
        label_boxes(np.zeros((5, 5)))


def test_boxes_that_only_touch_do_not_overlap():
    assert not overlap((slice(0, 2), slice(0, 2)), (slice(2, 3), slice(0, 2)))
    assert overlap((slice(0, 2), slice(0, 2)), (slice(1, 3), slice(1, 2)))
    assert joined((slice(0, 2), slice(3, 4)), (slice(1, 5), slice(0, 1))) == (
        slice(0, 5),
        slice(0, 4),
    )


def test_a_map_is_equal_to_itself_alone():
    """Answers are kept by region: one that grew must not be taken for what it was."""
    one = Mask(np.ones((3, 3), bool), (1.0, 1.0, 1.0), name="m")
    other = Mask(np.ones((4, 4), bool), (1.0, 1.0, 1.0), name="m")
    assert one != other
    assert one != Mask(one.inside, one.spacing_mm, name="m")
    assert one == one  # noqa: PLR0124
    assert len({one, other}) == 2
    maps = [Labels(np.full((2, 2), n), (1.0, 1.0, 1.0)) for n in (1, 2)]
    assert maps[0] != maps[1]
    assert len(set(maps)) == 2
