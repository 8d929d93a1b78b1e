"""Statistics against published values, closed forms and numpy."""

from __future__ import annotations

import math

import ibsi
import numpy as np
import pytest
from scipy import stats

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics import region_statistics
from ct_measure_plugin.physics.region_statistics import weighted_quantile
from ct_measure_plugin.physics.results import NotMeasured

SPACING = (0.5, 0.5)
ROUNDED = 5e-3  # the published values are rounded to three significant digits


def codes(result) -> set[str]:
    return {caution.code for caution in result.cautions}


def test_the_ibsi_digital_phantom_through_a_mask():
    """IBSI reference manual (arXiv:1612.07003), section 3.3, digital phantom."""
    found = region_statistics(ibsi.IMAGE, ibsi.MASK.astype(float), spacing_mm=ibsi.SPACING_MM)
    for name in ("mean", "skewness", "kurtosis", "median", "minimum", "maximum"):
        value = getattr(found, name).value
        assert value == pytest.approx(ibsi.PUBLISHED[name], abs=ROUNDED), name
    population = found.sd.value**2 * (74 - 1) / 74  # the published variance divides by N
    assert population == pytest.approx(ibsi.PUBLISHED["variance"], abs=ROUNDED)
    assert found.n.value == 74
    assert found.volume.value == 592.0  # 74 voxels of 8 mm³; the manual's approximate volume


def test_unweighted_numbers_are_numpys_and_scipys():
    values = np.random.default_rng(1).gamma(3.0, 20.0, (31, 27))
    found = region_statistics(values, spacing_mm=SPACING)
    assert found.mean.value == pytest.approx(values.mean(), rel=1e-12)
    assert found.sd.value == pytest.approx(values.std(ddof=1), rel=1e-12)
    assert found.median.value == pytest.approx(np.median(values), rel=1e-12)
    assert found.skewness.value == pytest.approx(stats.skew(values.ravel()), rel=1e-10)
    assert found.kurtosis.value == pytest.approx(stats.kurtosis(values.ravel()), rel=1e-10)
    assert (found.minimum.value, found.maximum.value) == (values.min(), values.max())
    assert found.area.value == pytest.approx(values.size * 0.25)


def test_integer_weights_of_none_and_one_select():
    rng = np.random.default_rng(2)
    values, inside = rng.normal(0, 10, (20, 20)), rng.random((20, 20)) < 0.4
    found = region_statistics(values, inside.astype(float), spacing_mm=SPACING)
    assert found.mean.value == pytest.approx(values[inside].mean(), abs=1e-12)
    assert found.sd.value == pytest.approx(values[inside].std(ddof=1), rel=1e-12)


def test_the_weighted_mean_of_a_ramp_is_its_value_at_the_centroid():
    """A linear field's mean over any region is the field at the region's centroid, up to the
    quadratic part of the border pixels, which do not know where in the pixel the region lies."""
    from ct_measure_plugin.physics.coverage import plane_coverage
    from ct_measure_plugin.physics.regions import Disc

    y, x = np.mgrid[:64, :64]
    for cy, cx in ((30.0, 31.0), (30.3, 31.7), (30.5, 31.5)):
        cover = plane_coverage(Disc((cy, cx), 8.2), (64, 64), spacing_mm=(1, 1))
        ramp = (3.0 * x + 2.0 * y)[cover.rows, cover.columns].astype(float)
        found = region_statistics(ramp, cover.weights, spacing_mm=(1, 1))
        # the pixel-centre rule would be off by up to 0.5 here
        assert found.mean.value == pytest.approx(3 * cx + 2 * cy, abs=0.02)


def test_equal_values_have_no_spread_and_no_shape():
    found = region_statistics(np.full((9, 9), 0.1), np.full((9, 9), 0.3), spacing_mm=SPACING)
    assert (found.mean.value, found.mean.uncertainty) == (0.1, 0.0)
    assert (found.sd.value, found.skewness.value, found.kurtosis.value) == (0.0, 0.0, 0.0)


def test_values_without_a_finite_number_are_left_out_and_told():
    values = np.full((10, 10), 7.0)
    values[0, 0], values[0, 1] = np.nan, np.inf
    found = region_statistics(values, spacing_mm=SPACING)
    assert found.mean.value == 7.0
    assert found.n.value == 98
    assert "not-finite" in codes(found)


@pytest.mark.parametrize(
    ("values", "weights"),
    [([5.0], None), ([5.0, 6.0], [1.0, 0.0]), ([np.nan, np.nan], None)],
    ids=["one", "one with weight", "none finite"],
)
def test_fewer_than_two_pixels_are_not_measured(values, weights):
    found = region_statistics(values, weights, spacing_mm=(1.0,))
    assert isinstance(found, NotMeasured)
    assert "at least 2 are needed" in found.reason


def test_misuse_names_the_argument():
    with pytest.raises(ArgumentError, match="'weights' must have the values' shape"):
        region_statistics(np.zeros((3, 3)), np.zeros((3, 4)), spacing_mm=SPACING)
    with pytest.raises(ArgumentError, match="'weights' must lie within 0 to 1"):
        region_statistics(np.zeros((3, 3)), np.full((3, 3), 2.0), spacing_mm=SPACING)
    with pytest.raises(ArgumentError, match="'values' must hold pixels"):
        region_statistics(np.zeros((0,)), spacing_mm=SPACING)
    with pytest.raises(ArgumentError, match="'spacing_mm' must hold lengths"):
        region_statistics(np.zeros((3, 3)), spacing_mm=(1.0, -1.0))


def test_a_flat_list_says_that_it_was_taken_as_independent():
    found = region_statistics(np.arange(60.0), spacing_mm=(0.5, 0.5))
    assert "independence-assumed" in codes(found)
    student = stats.t.ppf(0.975, 59) / stats.norm.ppf(0.975)
    error = found.sd.value / math.sqrt(60) * student
    assert found.mean.uncertainty == pytest.approx(error, rel=1e-4)  # the factor is tabulated


def test_few_pixels_are_cautioned_from_the_stated_number_on():
    assert "few-pixels" in codes(region_statistics(np.arange(49.0), spacing_mm=(1.0,)))
    assert "few-pixels" not in codes(region_statistics(np.arange(50.0), spacing_mm=(1.0,)))


def test_every_number_states_its_uncertainty_or_why_not():
    found = region_statistics(np.random.default_rng(3).normal(size=(12, 12)), spacing_mm=SPACING)
    without = [name for name in ("minimum", "maximum") if getattr(found, name).uncertainty is None]
    assert without == ["minimum", "maximum"]
    assert "no-uncertainty" in codes(found)
    for name in ("mean", "sd", "median", "skewness", "kurtosis", "n", "area", "effective_n"):
        assert getattr(found, name).uncertainty is not None, name


@pytest.mark.parametrize("at", [0.0, 0.1, 0.25, 0.5, 0.9, 1.0])
def test_equal_weights_give_numpys_linear_quantile(at):
    values = np.random.default_rng(4).normal(size=37)
    mine = weighted_quantile(values, np.full(37, 0.4), at)
    assert mine == pytest.approx(np.quantile(values, at), rel=1e-12)


def test_stated_uncertainties_match_the_scatter_of_repeats():
    """White Gaussian noise, 3,000 repeats of 400 pixels: mean, sd, median, skewness, kurtosis."""
    rng = np.random.default_rng(5)
    found = [
        region_statistics(rng.normal(30, 12, (20, 20)), spacing_mm=SPACING) for _ in range(3000)
    ]
    for name in ("mean", "sd", "median", "skewness", "kurtosis"):
        values = np.array([getattr(f, name).value for f in found])
        stated = np.array([getattr(f, name).uncertainty for f in found])
        ratio = math.sqrt(np.mean(stated**2)) / values.std()
        # 3,000 repeats fix the scatter to 1.3 %; the median's order-statistic estimate and the
        # small-sample terms of skewness and kurtosis (about 3/n) add a few percent; Student's factor
        # widens the mean's, never narrows it
        assert 0.94 < ratio < 1.09, name
