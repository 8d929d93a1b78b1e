"""Statistics of labels against SimpleITK, scikit-image, and numpy label by label."""

from __future__ import annotations

import math

import numpy as np
import pytest
import SimpleITK as sitk  # noqa: N813 - as its own pages import it
from scipy import stats
from skimage.measure import regionprops_table

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.measurements import measure
from ct_measure_plugin.physics.label_numbers import label_numbers
from ct_measure_plugin.physics.regions import Mask
from ct_measure_plugin.physics.volume import Volume

ROUNDING = 1e-9  # sums of 10⁴ values of size 10³ in double precision, in two orders

SPACING = (2.5, 0.7, 0.6)


def scattered(rng: np.random.Generator, labels: int, shape=(9, 40, 44)) -> np.ndarray:
    """Labels thrown at random: touching, torn, some of a single voxel."""
    found = rng.integers(0, labels + 1, shape)
    found[rng.random(shape) < 0.5] = 0
    found[0, 0, 0] = labels + 3  # one voxel, after a gap
    return found.astype(np.uint16)


@pytest.fixture(scope="module", params=["whole", "fractions"])
def pair(request) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(41)
    labels = scattered(rng, 12)
    values = rng.normal(40, 200, labels.shape) + 30.0 * labels
    return (np.rint(values).astype(np.int16) if request.param == "whole" else values), labels


def test_simpleitks_label_statistics_agree(pair):
    """LabelStatisticsImageFilter, and LabelIntensityStatisticsImageFilter for the third and fourth
    moments, which it divides by powers of the sample variance where ours is the population's."""
    values, labels = pair
    image, map_ = sitk.GetImageFromArray(values.astype(float)), sitk.GetImageFromArray(labels)
    for one in (image, map_):
        one.SetSpacing(SPACING[::-1])
    plain, shaped = sitk.LabelStatisticsImageFilter(), sitk.LabelIntensityStatisticsImageFilter()
    plain.Execute(image, map_)
    shaped.Execute(map_, image)
    found = label_numbers(values, labels)
    assert found.label.tolist() == [one for one in sorted(plain.GetLabels()) if one]
    for i, label in enumerate(found.label.tolist()):
        n = plain.GetCount(label)
        assert found.n[i] == n
        assert found.mean[i] == pytest.approx(plain.GetMean(label), rel=ROUNDING)
        assert found.minimum[i] == plain.GetMinimum(label)
        assert found.maximum[i] == plain.GetMaximum(label)
        if n < 2:
            assert math.isnan(found.sd[i])
            continue
        assert found.sd[i] == pytest.approx(plain.GetSigma(label), rel=ROUNDING)
        # its power sums are not centred: a digit or two less
        ratio = n / (n - 1)
        assert found.skewness[i] == pytest.approx(
            shaped.GetSkewness(label) * ratio**1.5, rel=1e-6, abs=1e-8
        )
        assert found.kurtosis[i] == pytest.approx(
            (shaped.GetKurtosis(label) + 3) * ratio**2 - 3, rel=1e-6, abs=1e-8
        )


def test_scikit_images_region_properties_agree(pair):
    """regionprops_table's intensity_std is the population's."""
    values, labels = pair
    asked = ("label", "intensity_mean", "intensity_std", "intensity_min", "intensity_max", "area")
    table = regionprops_table(labels, values, properties=asked)
    found = label_numbers(values, labels)
    np.testing.assert_array_equal(found.label, table["label"])
    np.testing.assert_array_equal(found.n, table["area"])
    np.testing.assert_allclose(found.mean, table["intensity_mean"], rtol=ROUNDING)
    np.testing.assert_allclose(found.population_sd, table["intensity_std"], rtol=ROUNDING)
    np.testing.assert_array_equal(found.minimum, table["intensity_min"])
    np.testing.assert_array_equal(found.maximum, table["intensity_max"])


def test_order_and_shape_are_numpys_and_scipys(pair):
    values, labels = pair
    found = label_numbers(values, labels, percentiles=(0.0, 10.0, 50.0, 97.5, 100.0))
    for i, label in enumerate(found.label.tolist()):
        own = values[labels == label].astype(float)
        expected = np.percentile(own, [0, 10, 50, 97.5, 100])
        np.testing.assert_allclose(found.percentiles[i], expected, rtol=ROUNDING)
        if own.size > 1:
            assert found.skewness[i] == pytest.approx(stats.skew(own), rel=1e-7, abs=ROUNDING)
            assert found.kurtosis[i] == pytest.approx(stats.kurtosis(own), rel=1e-7, abs=ROUNDING)


def test_a_label_and_its_mask_are_one_region(pair):
    """Through the measurement, with its uncertainties, and through the table: one answer."""
    values, labels = pair
    found = label_numbers(values, labels)
    volume = Volume(values, SPACING)
    for i, label in enumerate(found.label.tolist()):
        if found.n[i] < 9:
            continue
        answer = measure("region_statistics", volume, Mask(labels == label, SPACING))
        for name in ("mean", "sd", "population_sd", "minimum", "maximum", "skewness", "kurtosis"):
            mine, table = getattr(answer, name).value, getattr(found, name)[i]
            assert table == pytest.approx(mine, rel=1e-7, abs=ROUNDING), name
        assert answer.n.value == found.n[i]
        assert answer.median.value == pytest.approx(found.percentiles[i, 2], rel=ROUNDING)
        assert answer.volume.value == pytest.approx(found.n[i] * math.prod(SPACING), rel=ROUNDING)


def test_counting_and_sorting_give_the_same():
    """Whole numbers are counted in a table; the same as floats are sorted."""
    rng = np.random.default_rng(42)
    labels = scattered(rng, 30)
    values = rng.integers(-1024, 3072, labels.shape, dtype=np.int16)
    counted, ordered = label_numbers(values, labels), label_numbers(values.astype(float), labels)
    for name in ("label", "n", "minimum", "maximum", "percentiles"):
        np.testing.assert_array_equal(getattr(counted, name), getattr(ordered, name))
    for name in ("mean", "sd", "population_sd", "skewness", "kurtosis"):
        np.testing.assert_allclose(getattr(counted, name), getattr(ordered, name), rtol=1e-12)


def test_ten_thousand_labels():
    rng = np.random.default_rng(43)
    labels = rng.permutation(np.arange(400_000) % 10_001).reshape(20, 100, 200)
    values = rng.normal(0, 10, labels.shape)
    found = label_numbers(values, labels)
    assert len(found.label) == 10_000
    some = rng.choice(10_000, 50, replace=False)
    for i in some.tolist():
        own = values[labels == found.label[i]]
        assert found.mean[i] == pytest.approx(own.mean(), rel=ROUNDING, abs=ROUNDING)
        assert found.percentiles[i, 2] == pytest.approx(np.median(own), rel=ROUNDING)


def test_negative_labels_and_wide_ones_are_labels_too():
    labels = np.array([[-3, -3, 0, 2_000_000_000]])
    found = label_numbers(np.array([[1, 3, 9, 5]]), labels)
    assert found.label.tolist() == [-3, 2_000_000_000]
    assert found.mean.tolist() == [2.0, 5.0]


KINDS = {
    0: ("i1", "u1", "i2", "u2", "i4", "u4", "i8", "u8", "f4"),
    10**6: ("i4", "u4", "i8", "u8", "f4"),
    10**12: ("i8", "u8", "f8"),
}


@pytest.mark.parametrize(("offset", "kind"), [(o, k) for o, kinds in KINDS.items() for k in kinds])
def test_every_type_and_size_of_number_counts_alike(kind, offset):
    rng = np.random.default_rng(44)
    labels = scattered(rng, 6)
    values = rng.integers(0, 100, labels.shape) + offset
    found = label_numbers(values.astype(kind), labels)
    for i, label in enumerate(found.label.tolist()):
        own = values[labels == label]
        assert (found.minimum[i], found.maximum[i]) == (own.min(), own.max())
        assert found.mean[i] == pytest.approx(own.mean(), rel=1e-12)


def test_values_without_a_number_are_counted():
    values = np.array([1.0, np.nan, 3.0, np.inf, np.nan, 7.0])
    found = label_numbers(values, np.array([1, 1, 1, 1, 2, 3]))
    assert found.n.tolist() == [2, 0, 1]
    assert found.lost.tolist() == [2, 1, 0]
    assert found.mean[0] == 2.0
    assert np.isnan(found.mean[1])
    assert np.isnan(found.percentiles[1]).all()


def test_equal_values_have_no_spread():
    values = np.full(30, 0.1)
    found = label_numbers(values, np.ones(30, int))
    assert (found.sd[0], found.skewness[0], found.kurtosis[0]) == (0.0, 0.0, 0.0)


def test_a_map_without_labels_gives_none():
    found = label_numbers(np.zeros((4, 4)), np.zeros((4, 4), np.uint8))
    assert len(found.label) == 0
    assert found.percentiles.shape == (0, 5)


@pytest.mark.parametrize(
    ("labels", "message"),
    [
        (np.zeros((4, 5), int), r"'labels' must have the values' shape \(4, 4\), got \(4, 5\)"),
        (np.zeros((4, 4)), "'labels' must hold whole numbers, got 'float64'"),
    ],
    ids=["another shape", "fractions"],
)
def test_misuse_names_the_argument(labels, message):
    with pytest.raises(ArgumentError, match=message):
        label_numbers(np.zeros((4, 4)), labels)
    with pytest.raises(ArgumentError, match="'percentiles' must lie within 0 to 100"):
        label_numbers(np.zeros(3), np.zeros(3, int), percentiles=(101.0,))
