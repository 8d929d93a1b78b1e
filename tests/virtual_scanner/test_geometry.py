"""Where the rays run, against lines drawn between two points."""

from __future__ import annotations

import math

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.virtual_scanner.geometry import FanBeam, ParallelBeam


def _through(points_a, points_b):
    """Return cos θ, sin θ, t of the line through two points (x, y), t's sign aside."""
    (xa, ya), (xb, yb) = points_a, points_b
    length = math.hypot(xb - xa, yb - ya)
    cos, sin = (yb - ya) / length, -(xb - xa) / length
    return cos, sin, xa * cos + ya * sin


@pytest.mark.parametrize("shift", [0.0, 0.6])
@pytest.mark.parametrize(("view", "channel"), [(0, 10), (7, 0), (31, 119), (50, 60)])
def test_a_fan_ray_joins_its_source_and_its_detector_element(view, channel, shift):
    """Source and element are placed in the plane by hand and joined by a straight line."""
    fan = FanBeam(
        views=72, channels=120, pitch_mm=1.0, source_mm=400.0, detector_mm=700.0,
        focal_spot_mm=1.2, focal_rays=2,
    )  # fmt: skip
    beta = fan.angles[view]
    gamma = (channel - 59.5) * 1.0 / 400.0
    across = np.array([math.cos(beta), math.sin(beta)])
    along = np.array([math.sin(beta), -math.cos(beta)])  # from the source to the isocentre
    centre = -400.0 * along
    element = centre + 700.0 * (math.sin(gamma) * across + math.cos(gamma) * along)
    cos, sin, t = _through(centre + shift * across, element)
    found = fan.rays(np.array(view), np.array(channel), (0.0, shift))
    sign = math.copysign(1.0, found.cos * cos + found.sin * sin)
    np.testing.assert_allclose(np.array(found), sign * np.array([cos, sin, t]), atol=1e-9)


@pytest.mark.parametrize(
    "geometry",
    [
        ParallelBeam(views=40, channels=200, pitch_mm=1.0),
        FanBeam(views=40, channels=200, pitch_mm=1.0, source_mm=500.0),
    ],
    ids=["parallel", "fan"],
)
def test_the_channel_that_sees_a_point_has_a_ray_through_it(geometry):
    y, x = 31.0, -22.0
    channel = geometry.channel_of(y, x)
    low = np.floor(channel).astype(int)
    view = np.arange(geometry.views)
    distances = []
    for step in (0, 1):
        rays = geometry.rays(view, low + step, (0.0, 0.0))
        distances.append(rays.t - (x * rays.cos + y * rays.sin))
    below, above = distances
    assert np.all(below <= 1e-9)
    assert np.all(above >= -1e-9)
    # linear between two channels 1 mm apart; a fan's sagitta over 1 mm at 500 mm is 0.00025 mm
    np.testing.assert_allclose(below / (below - above), channel - low, atol=1e-3)


@pytest.mark.parametrize("fan", [False, True])
def test_a_disc_touches_no_channel_outside_its_spread(fan):
    shape = {"views": 30, "channels": 300, "pitch_mm": 0.5, "aperture_rays": 2}
    geometry = FanBeam(**shape, source_mm=300.0) if fan else ParallelBeam(**shape)
    y, x, radius = -25.0, 40.0, 4.0
    spread = geometry.spread_of(radius, y, x)
    view, channel = np.meshgrid(np.arange(30), np.arange(300), indexing="ij")
    for sub in geometry.sub_offsets():
        rays = geometry.rays(view, channel, sub)
        distance = np.abs(rays.t - (x * rays.cos + y * rays.sin))
        touched = distance <= radius + 0.5 * geometry.strip_mm
        away = np.abs(channel - np.rint(geometry.channel_of(y, x))[:, None])
        assert touched.any()
        assert away[touched].max() <= spread


def test_sub_samples_tile_aperture_and_focal_spot():
    beam = ParallelBeam(
        channels=4, pitch_mm=1.0, aperture_mm=0.8, aperture_rays=4, focal_spot_mm=0.6, focal_rays=3
    )
    subs = np.array(beam.sub_offsets())
    assert len(subs) == 12
    np.testing.assert_allclose(np.unique(subs[:, 0]), [-0.3, -0.1, 0.1, 0.3])
    np.testing.assert_allclose(np.unique(subs[:, 1].round(12)), [-0.2, 0.0, 0.2])
    assert beam.strip_mm == pytest.approx(0.2)


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: ParallelBeam(views=1), "'views' must be at least 2, got 1"),
        (lambda: ParallelBeam(pitch_mm=0.0), "'pitch_mm' must be greater than 0"),
        (lambda: ParallelBeam(arc_deg=270), "'arc_deg' must be 180 or 360"),
        (lambda: ParallelBeam(focal_spot_mm=1.0), "'focal_rays' must be at least 2"),
        (lambda: FanBeam(pitch_mm=-1.0), "'pitch_mm' must be greater than 0"),
        (lambda: FanBeam(channels=1), "'channels' must be at least 2"),
        (lambda: FanBeam(focal_spot_mm=1.0), "'focal_rays' must be at least 2"),
        (lambda: FanBeam(source_mm=900.0), r"'detector_mm' must be greater than source_mm \(900"),
        (lambda: FanBeam(channels=4000), "'channels' must span less than 135 degrees"),
    ],
)
def test_misuse_is_named(make, words):
    with pytest.raises(ArgumentError, match=words):
        make()
