"""Rows of labels against the same regions measured one by one."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics import label_statistics, region_statistics
from ct_measure_plugin.physics.results import NotMeasured, Quantity

SPACING = (2.0, 0.6, 0.7)
NUMBERS = (
    *("mean", "sd", "minimum", "maximum", "median", "p10", "p25", "p75", "p90"),
    *("skewness", "kurtosis", "n"),
)


def blobs() -> np.ndarray:
    """Four boxes, one of them on a single slice, and a ball."""
    labels = np.zeros((6, 60, 64), np.uint16)
    labels[1:5, 4:24, 4:30] = 3
    labels[2, 30:50, 4:28] = 7
    labels[0:6, 4:20, 36:60] = 8
    z, y, x = np.mgrid[:6, :60, :64]
    labels[((z - 3) / 3) ** 2 + ((y - 42) / 14) ** 2 + ((x - 48) / 13) ** 2 <= 1] = 300
    return labels


def noisy(kind: str, labels: np.ndarray) -> np.ndarray:
    from scipy import ndimage

    rng = np.random.default_rng(51)
    field = rng.normal(0, 40, labels.shape)
    if kind == "smooth":
        field = ndimage.gaussian_filter(field, (0, 1, 1))
    values = 30 + field
    return np.rint(values).astype(np.int16) if kind == "whole" else values


@pytest.mark.parametrize("kind", ["whole", "white", "smooth"])
def test_a_row_is_the_region_measured_by_itself(kind):
    """Values and uncertainties, the label's noise correlation among them."""
    labels = blobs()
    values = noisy(kind, labels)
    found = label_statistics(values, labels, spacing_mm=SPACING, names={3: "block"})
    assert [row.name for row in found.labels] == ["block", "label 7", "label 8", "label 300"]
    for row in found.labels:
        z, y, x = (
            np.flatnonzero((labels == row.label).any(axis=a)) for a in ((1, 2), (0, 2), (0, 1))
        )
        box = np.s_[z[0] : z[-1] + 1, y[0] : y[-1] + 1, x[0] : x[-1] + 1]
        own, inside = values[box].astype(float), (labels[box] == row.label).astype(float)
        steps = SPACING
        if len(own) == 1:
            own, inside, steps = own[0], inside[0], SPACING[1:]
        twin = region_statistics(own, inside, spacing_mm=steps)
        for name in NUMBERS:
            mine, theirs = getattr(row, name), getattr(twin, name)
            assert mine.value == pytest.approx(theirs.value, rel=1e-9, abs=1e-9), name
            assert mine.unit == theirs.unit
            if theirs.uncertainty is None:
                assert mine.uncertainty is None
            else:
                assert mine.uncertainty == pytest.approx(theirs.uncertainty, rel=1e-6), name
        assert row.size.value == pytest.approx(row.n.value * 0.84)


def test_independent_pixels_are_the_textbooks():
    labels = blobs()
    values = noisy("smooth", labels)
    found = label_statistics(values, labels, spacing_mm=SPACING, noise="independent")
    for row in found.labels:
        # Student's factor of a thousand pixels
        naive = row.sd.value / np.sqrt(row.n.value)
        assert naive < row.mean.uncertainty < 1.003 * naive
    assert "independence-assumed" in {c.code for c in found.cautions}
    true = label_statistics(values, labels, spacing_mm=SPACING)
    assert true.labels[0].mean.uncertainty > 2 * found.labels[0].mean.uncertainty


def test_without_uncertainties_the_numbers_are_the_same():
    labels = blobs()
    values = noisy("whole", labels)
    full = label_statistics(values, labels, spacing_mm=SPACING)
    plain = label_statistics(values, labels, spacing_mm=SPACING, noise="none")
    for row, other in zip(full.labels, plain.labels, strict=True):
        for name in NUMBERS:
            mine = getattr(other, name)
            assert mine.value == getattr(row, name).value, name
            assert mine.uncertainty in (None, 0.0)
    assert any("No uncertainties were asked for" in c.text for c in plain.cautions)


def test_one_pixel_has_no_spread_and_none_without_a_value_no_mean():
    values = np.array([[1.0, np.nan, 3.0, 5.0]])
    found = label_statistics(values, np.array([[4, 5, 6, 6]]), spacing_mm=(1.0, 1.0))
    one, lost, two = found.labels
    assert (one.mean.value, one.mean.uncertainty, one.sd) == (1.0, None, "")
    assert (lost.n.value, lost.mean, lost.median) == (0.0, "", "")
    assert two.mean.value == 4.0
    assert isinstance(two.sd, Quantity)
    said = {c.code: c.text for c in found.cautions}
    assert said["not-finite"].startswith("1 pixels of the labels")
    assert said["few-pixels"].startswith("3 of 3 labels")


def test_an_empty_map_is_not_measured():
    found = label_statistics(np.zeros((4, 4)), np.zeros((4, 4), int), spacing_mm=(1, 1))
    assert isinstance(found, NotMeasured)
    assert found.reason == "the label map holds no label"


def test_ten_thousand_labels_are_ten_thousand_rows():
    rng = np.random.default_rng(52)
    labels = np.arange(10_000).repeat(25).reshape(100, 2500) + 1
    values = rng.integers(-50, 90, labels.shape)
    found = label_statistics(values, labels, spacing_mm=(1.0, 1.0), noise="independent")
    assert len(found.labels) == found.count.value == 10_000
    own = values[labels == 4321]
    row = found.labels[4320]
    assert (row.label, row.mean.value) == (4321, pytest.approx(own.mean()))
    assert row.sd.value == pytest.approx(own.std(ddof=1))


def test_misuse_names_the_argument():
    with pytest.raises(ArgumentError, match="'labels' must have the values' shape"):
        label_statistics(np.zeros((4, 4)), np.zeros((4, 5), int), spacing_mm=(1, 1))
    with pytest.raises(ArgumentError, match="'noise' must be 'region', 'independent' or 'none'"):
        label_statistics(np.zeros((4, 4)), np.zeros((4, 4), int), spacing_mm=(1, 1), noise="x")
    with pytest.raises(ArgumentError, match="'spacing_mm' must hold 2 lengths"):
        label_statistics(np.zeros((4, 4)), np.zeros((4, 4), int), spacing_mm=(1, 1, 1))
