"""What slices see of solid objects."""

from __future__ import annotations

import math

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.attenuation import material
from ct_measure_plugin.virtual_scanner.phantom import AIR, WATER, Part, Phantom
from ct_measure_plugin.virtual_scanner.slice_profile import SliceProfile
from ct_measure_plugin.virtual_scanner.solids import (
    Bead,
    Leaning,
    block,
    disc_rod,
    elliptic_cylinder,
    ramp_strip,
    tilted_wire,
)

FLAT = SliceProfile("rectangular", 2.0)


def _seen_area(pieces):
    """Weighted area of what a slice sees, from one view."""
    t = np.arange(-400, 400) * 0.05
    one, none = np.ones_like(t), np.zeros_like(t)
    return sum(p.weight * p.section.strip_mean(one, none, t, 0.05).sum() * 0.05 for p in pieces)


def test_a_straight_object_enters_by_its_share_of_the_slice():
    rod = disc_rod((0.0, 0.0), 3.0, (0.0, 10.0))
    assert [p.weight for p in rod.pieces(FLAT, 5.0)] == [1.0]
    assert [p.weight for p in rod.pieces(FLAT, 0.5)] == [0.75]
    assert rod.pieces(FLAT, -1.0) == ()
    assert rod.at(10.5) is None


@pytest.mark.parametrize("z_mm", [0.0, 0.6, 1.2])
def test_the_slices_share_out_the_volume_of_a_bead(z_mm):
    """Abutting flat slices of 2 mm hold its volume 4/3 π r³ between them, wherever it lies."""
    bead = Bead((z_mm, 1.0, -2.0), 0.9)
    volume = 2.0 * sum(_seen_area(bead.pieces(FLAT, z)) for z in (-4.0, -2.0, 0.0, 2.0, 4.0))
    assert volume == pytest.approx(4.0 / 3.0 * math.pi * 0.9**3, rel=1e-6)


def test_a_tilted_wire_is_an_ellipse_that_moves():
    wire = tilted_wire((10.0, 2.0, 3.0), 0.4, tilt_deg=20.0, towards_deg=90.0)
    cut = wire.at(13.0)
    assert cut.semi_axes_mm == pytest.approx((0.2 / math.cos(math.radians(20)), 0.2))
    # towards 90° is up the screen: y falls as z rises
    assert cut.centre_mm == pytest.approx((2.0 - 3.0 * math.tan(math.radians(20)), 3.0))
    assert sum(p.weight for p in wire.pieces(FLAT, 10.0)) == pytest.approx(1.0, abs=1e-10)


def test_a_ramp_spreads_the_slice_by_the_tangent_of_its_angle():
    """A length s along the slice stands for z = s tan 23°, so 2 mm of slice spread over 4.71 mm.

    tan 23° = 0.42447.
    """
    strip = ramp_strip((0.0, 0.0, 0.0), thickness_mm=0.2, width_mm=5.0, angle_deg=23.0)
    places = np.array([p.section.centre_mm[1] for p in strip.pieces(FLAT, 0.0)])
    spread = places.max() - places.min() + np.diff(np.sort(places)).max()
    assert spread == pytest.approx(2.0 / 0.42447, rel=1e-4)
    # in the plane the strip is 0.2 / sin 23° long
    x, _ = np.array([c[::-1] for c in strip.at(0.0).corners_mm]).T
    assert np.ptp(x) == pytest.approx(0.2 / math.sin(math.radians(23.0)))


def test_a_leaning_object_ends_where_it_ends():
    wire = tilted_wire((0.0, 0.0, 0.0), 0.4, tilt_deg=10.0, z_mm=(-0.5, 0.5))
    assert sum(p.weight for p in wire.pieces(FLAT, 0.0)) == pytest.approx(0.5, abs=1e-10)
    assert wire.pieces(FLAT, 5.0) == ()
    assert wire.at(0.6) is None


def test_a_phantom_knows_what_fills_a_point():
    rod = Part(disc_rod((0.0, 20.0), 6.0, (0.0, 5.0)), material("PTFE"), inside=WATER)
    hole = Part(disc_rod((0.0, 20.0), 2.0, (0.0, 5.0)), AIR, inside=material("PTFE"))
    phantom = Phantom((Part(elliptic_cylinder((0.0, 0.0), (60.0, 40.0)), WATER), rod, hole))
    names = [phantom.material_at(z, y, x).name for z, y, x in ((1, 0, 24), (1, 0, 20), (9, 0, 20))]
    assert names == ["PTFE", "air", "water"]
    assert phantom.material_at(1.0, 50.0, 0.0) is AIR
    assert [m.name for m in phantom.materials()] == ["water", "PTFE", "air"]


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: disc_rod((0, 0), 0.0), "'semi_axes_mm' must each be greater than 0"),
        (lambda: block((0, 0), (1.0, 1.0), z_mm=(2.0, 1.0)), r"'z_mm' must be \(low, high\)"),
        (lambda: Bead((0, 0, 0), -1.0), "'radius_mm' must be greater than 0"),
        (lambda: Bead((0, 0, 0), 1.0, layers=0), "'layers' must be at least 1"),
        (lambda: tilted_wire((0, 0, 0), 0.1, tilt_deg=85.0), "'tilt_deg' must lie in 0"),
        (
            lambda: ramp_strip((0, 0, 0), thickness_mm=1.0, width_mm=1.0, angle_deg=2.0),
            "'angle_deg' must lie within 5 to 85",
        ),
        (
            lambda: Leaning(disc_rod((0, 0), 1.0).section, (0.1, 0.1), step_mm=0.0),
            "'step_mm' must be greater than 0",
        ),
        (lambda: Phantom(()), "'parts' must hold at least one part"),
    ],
)
def test_misuse_is_named(make, words):
    with pytest.raises(ArgumentError, match=words):
        make()
