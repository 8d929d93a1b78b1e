"""Slice profiles: width, area and shares."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.virtual_scanner.slice_profile import SliceProfile

PROFILES = [
    SliceProfile("rectangular", 2.5),
    SliceProfile("trapezoid", 3.0, penumbra=0.3),
    SliceProfile("trapezoid", 2.0, penumbra=1.0),
    SliceProfile("gaussian", 1.7),
]
BY_SHAPE = pytest.mark.parametrize("profile", PROFILES, ids=lambda p: f"{p.shape}-{p.penumbra}")


@BY_SHAPE
def test_full_width_at_half_maximum_is_the_width(profile):
    """For the rectangle the value at its very edge is one half by definition."""
    half = 0.5 * profile.width_mm
    assert float(profile.relative(half)) == pytest.approx(0.5, abs=1e-12)
    inside, outside = profile.relative([half - 1e-6, half + 1e-6])
    assert inside > 0.5 > outside


@BY_SHAPE
def test_share_is_the_integral_of_the_profile(profile):
    """Trapezium rule with 20 001 nodes; a jump costs at most half a step of 1/4000 of the width."""
    z = np.linspace(-profile.reach_mm, profile.reach_mm, 20_001)
    values = profile.relative(z)
    below = np.concatenate([[0.0], np.cumsum(0.5 * (values[1:] + values[:-1]))])
    np.testing.assert_allclose(profile.share_below(z), below / below[-1], atol=1.5e-4)


@BY_SHAPE
def test_the_whole_profile_is_exactly_one(profile):
    """Exactly: whether two slices see the same thing is decided by equality."""
    assert profile.share(-profile.reach_mm, profile.reach_mm) == 1.0
    assert profile.share(-np.inf, np.inf) == 1.0
    assert profile.share(profile.reach_mm, profile.reach_mm + 1.0) == 0.0
    assert profile.share(-np.inf, 0.0) == 0.5


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: SliceProfile("round", 1.0), "'shape' must be 'rectangular'"),
        (lambda: SliceProfile("gaussian", 0.0), "'width_mm' must be greater than 0, got 0.0"),
        (lambda: SliceProfile("trapezoid", 1.0, penumbra=1.5), "'penumbra' must lie in 0 < p"),
    ],
)
def test_misuse_is_named(make, words):
    with pytest.raises(ArgumentError, match=words):
        make()
