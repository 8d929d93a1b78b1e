"""The line profile through the door that plans, docks and scripts use."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import ndtr

import ct_measure_plugin as ctm


def ramp_volume(**facts) -> ctm.Volume:
    """Values 10 y + x in mm of the image frame, the same on four slices but for their number."""
    y = -20.0 + 0.5 * np.arange(100)
    x = 7.0 + 0.4 * np.arange(120)
    plane = 10 * y[:, None] + x[None, :]
    stack = plane[None] + 100.0 * np.arange(4)[:, None, None]
    return ctm.Volume(stack, (2.0, 0.5, 0.4), origin_mm=(0.0, -20.0, 7.0), **facts)


def test_a_segment_is_read_in_the_image_frame():
    line = ctm.regions.Segment((-10.0, 15.0), (5.0, 40.0), z_mm=2.0)
    found = ctm.measure("line_profile", ramp_volume(), line)
    assert found.profile.y[0] == pytest.approx(10 * -10.0 + 15.0 + 100, abs=1e-6)
    assert found.profile.y[-1] == pytest.approx(10 * 5.0 + 40.0 + 100, abs=1e-6)
    assert found.length.value == pytest.approx(np.hypot(15, 25))
    assert found.sd is None


def test_slices_are_averaged_and_their_spread_is_kept():
    line = ctm.regions.Segment((-10.0, 15.0), (5.0, 40.0), z_mm=(0.0, 6.0))
    found = ctm.measure("line_profile", ramp_volume(), line)
    assert found.profile.y[0] == pytest.approx(10 * -10.0 + 15.0 + 150, abs=1e-6)
    np.testing.assert_allclose(found.sd.y, np.std([0, 100, 200, 300], ddof=1), rtol=1e-6)


def test_an_outline_is_followed_all_the_way_round():
    square = ctm.regions.Polygon(((-5.0, 15.0), (-5.0, 30.0), (5.0, 30.0), (5.0, 15.0)), z_mm=0.0)
    found = ctm.measure("line_profile", ramp_volume(), square)
    assert found.length.value == pytest.approx(50.0)
    assert found.profile.y[0] == pytest.approx(found.profile.y[-1], abs=1e-6)


def test_the_width_is_the_segments_or_the_settings():
    rng = np.random.default_rng(4)
    volume = ctm.Volume(rng.normal(0, 10, (1, 80, 80)), (1.0, 1.0, 1.0))
    line = ctm.regions.Segment((40.0, 10.0), (40.0, 70.0), width_mm=16.0)
    own = ctm.measure("line_profile", volume, line)
    thin = ctm.measure("line_profile", volume, line, width_mm=0.0)
    assert own.noise.value < 0.5 * thin.noise.value
    assert own.sd is not None
    assert thin.sd is None


def test_a_crop_changes_nothing():
    """Cubic interpolation looks at the neighbourhood only: cropped or whole, the same to 1e-6."""
    rng = np.random.default_rng(4)
    plane = rng.normal(0, 100, (200, 200))
    volume = ctm.Volume(plane[None], (1.0, 1.0, 1.0))
    line = ctm.regions.Segment((90.3, 95.7), (110.2, 101.4))
    found = ctm.measure("line_profile", volume, line)
    whole = ctm.physics.line_profile(plane, [line.start_mm, line.end_mm], spacing_mm=(1.0, 1.0))
    np.testing.assert_allclose(found.profile.y, whole.profile.y, atol=1e-4)


def test_what_cannot_be_read_is_refused():
    edge = 100 * ndtr(np.arange(60) - 30.0)
    plane = np.tile(edge, (60, 1))
    plane[30, 45] = -2000
    volume = ctm.Volume(plane[None], (1.0, 1.0, 1.0), padding_hu=np.array([[-2000.0, -2000.0]]))
    for line, words in (
        (ctm.regions.Segment((30.0, 10.0), (30.0, 50.0)), "padding"),
        (ctm.regions.Segment((5.0, 10.0), (5.0, 80.0)), "outside"),
        (ctm.regions.Segment((200.0, 10.0), (200.0, 80.0)), "outside"),
    ):
        found = ctm.measure("line_profile", volume, line)
        assert not found
        assert words in found.reason
    assert ctm.measure("line_profile", volume, ctm.regions.Segment((5.0, 10.0), (5.0, 50.0)))
