"""What rounding to whole numbers leaves uncertain, against rounded noise and closed forms."""

from __future__ import annotations

import math

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics import region_statistics
from ct_measure_plugin.physics.quantisation import rounding_of_mean, rounding_of_spread

SPACING = (0.5, 0.5)


def test_one_value_has_the_resolution_of_a_digital_indication():
    """JCGM 100:2008, F.2.2.1: u = 0.29 δx."""
    assert rounding_of_mean(0.0, 2.0) == pytest.approx(2.0 / math.sqrt(12))
    assert rounding_of_mean(0.0, 0.0) == 0.0
    assert rounding_of_spread(0.0, 1.0) == pytest.approx(0.29, abs=0.002)


@pytest.mark.parametrize("sigma", [0.05, 0.15, 0.25, 0.4])
def test_the_shift_of_a_rounded_mean_is_the_series(sigma):
    """The expectation of a rounded Gaussian is Σ k P(k), exact by the normal distribution."""
    from scipy import special

    mu = (np.arange(400) + 0.5) / 400
    k = np.arange(-5, 7)
    upper = special.ndtr((k + 0.5 - mu[:, None]) / sigma)
    lower = special.ndtr((k - 0.5 - mu[:, None]) / sigma)
    shift = ((upper - lower) * k).sum(axis=1) - mu
    true = math.sqrt(np.mean(shift**2))
    stored = math.sqrt(sigma**2 + 1 / 12)  # the mean over μ of the rounded values' variance
    assert rounding_of_mean(stored, 1.0) == pytest.approx(true, rel=0.01)


#: Stated over true error: root mean squares over 400 rounded regions of 400 pixels whose level is
#: anywhere between two steps; 400 repeats fix a root mean square to 3.5 %. How far noise below half
#: a step dithers is itself seen through the steps: levels near a whole number show next to none of
#: it and are doubted for all of it, hence the room above. Below, nothing may be missing.
NAMES = {
    "mean": (0.9, 2.5),
    "sd": (0.85, 1.8),
    "median": (0.85, 1.5),
    "p10": (0.85, 1.5),
    "p90": (0.85, 1.5),
}


@pytest.mark.parametrize("sigma", [0.0, 0.1, 0.3, 1.0, 5.0])
def test_stated_uncertainties_hold_on_rounded_noise(sigma):
    from scipy import stats

    rng = np.random.default_rng(31)
    errors: dict[str, list[tuple[float, float]]] = {name: [] for name in NAMES}
    for _ in range(400):
        level = rng.uniform(-20, 20)
        values = np.rint(level + sigma * rng.standard_normal((20, 20)))
        found = region_statistics(values, spacing_mm=SPACING)
        true = {
            "mean": level,
            "sd": sigma,
            "median": level,
            "p10": level + sigma * stats.norm.ppf(0.1),
            "p90": level + sigma * stats.norm.ppf(0.9),
        }
        for name, kept in errors.items():
            quantity = getattr(found, name)
            kept.append((quantity.value - true[name], quantity.uncertainty))
    off = {}
    for name, (low, high) in NAMES.items():
        error, stated = (math.sqrt(np.mean(np.square(x))) for x in zip(*errors[name], strict=True))
        if not low < stated / max(error, 1e-12) < high and not (name == "sd" and sigma == 0):
            off[name] = (error, stated)
    assert off == {}


def test_nothing_is_exact_that_was_read_off_whole_numbers():
    constant = region_statistics(np.full((12, 12), 40), spacing_mm=SPACING)
    for name in ("mean", "sd", "median", "p10", "p90", "interquartile_range"):
        assert getattr(constant, name).uncertainty >= 0.288, name
    noisy = np.rint(np.random.default_rng(1).normal(40, 0.4, (30, 30)))
    assert region_statistics(noisy, spacing_mm=SPACING).median.uncertainty >= 0.288


def test_the_step_is_the_callers_where_it_is_not_one():
    values = np.full((12, 12), 40.0)
    coarse = region_statistics(values, spacing_mm=SPACING, resolution=4.0)
    assert coarse.mean.uncertainty == pytest.approx(4 / math.sqrt(12))
    exact = region_statistics(values, spacing_mm=SPACING, resolution=0.0)
    assert exact.mean.uncertainty == 0.0
    with pytest.raises(ArgumentError, match="'resolution' must be 0 or greater"):
        region_statistics(values, spacing_mm=SPACING, resolution=-1.0)


def test_values_that_are_not_whole_were_not_rounded_to_whole_numbers():
    values = np.full((12, 12), 40.25)
    assert region_statistics(values, spacing_mm=SPACING).mean.uncertainty == 0.0


def test_an_empty_range_is_not_known_to_be_empty():
    """No voxel of 400 independent ones: 1/402 expected, not 0 (rule of succession)."""
    values = np.random.default_rng(2).normal(0, 5, (20, 20))
    found = region_statistics(values, spacing_mm=SPACING, ranges=((500.0, 600.0),))
    assert found.share.value == 0.0
    assert 100 / 600 < found.share.uncertainty < 100 / 300
