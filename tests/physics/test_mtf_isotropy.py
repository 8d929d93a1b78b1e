"""Resolution by direction and distance, against Gaussian blurs whose covariance is known."""

from __future__ import annotations

import math

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.mtf_isotropy import IsotropyPlace, mtf_isotropy
from ct_measure_plugin.physics.results import NotMeasured, Quantity

#: f50 of a Gaussian times its SD.
F50_SIGMA = math.sqrt(math.log(2) / 2) / math.pi


def blur(direction, *, wide, narrow, along, r=0.0, facing=0.0, gantry=0.0):
    """The f50 of a blur of SD `wide` along one direction and `narrow` across it.

    To it comes the blur of a gantry that turns by `gantry` radians (1 SD) within a view: across the
    radius and in proportion to the distance.
    """
    turn = math.radians(direction - along)
    square = (wide * math.cos(turn)) ** 2 + (narrow * math.sin(turn)) ** 2
    square += (r * gantry * math.sin(math.radians(facing))) ** 2
    return F50_SIGMA / math.sqrt(square)


def place(direction, f50, u=0.001, r=0.0, facing=0.0, half=0.0):
    """A place at a distance, so turned about the isocentre that the direction faces it so."""
    turn = math.radians(direction - facing)
    return IsotropyPlace.at(
        (20.0 - r * math.sin(turn), -30.0 + r * math.cos(turn)),
        Quantity(direction, "°", 0.1),
        Quantity(f50, "mm⁻¹", u),
        isocentre_mm=(20.0, -30.0),
        doubt_mm=0.05,
        half_width_deg=half,
    )


def ring(rng=None, u=0.001, angles=(5, 40, 85, 130, 175), **truth):
    """Places about the isocentre, with noise if there is a generator."""
    found = []
    for angle in angles:
        f50 = blur(angle, **truth) + (rng.normal(0, u) if rng else 0.0)
        found.append(place(angle, f50, u))
    return found


@pytest.mark.parametrize("along", [0.0, 30.0, 90.0, 150.0])
def test_an_oblong_blur_is_found(along):
    found = mtf_isotropy(ring(u=1e-5, wide=0.7, narrow=0.6, along=along))
    assert found.isotropy.value == pytest.approx(0.6 / 0.7, rel=1e-5)  # closed form
    assert found.sharpest_direction.value == pytest.approx((along + 90) % 180, abs=0.01)
    # the fitted curve passes through every direction's closed form
    for x, y in found.by_angle.samples():
        truth = blur(x, wide=0.7, narrow=0.6, along=along)
        assert y.value == pytest.approx(truth, rel=1e-5)
    assert len(found.by_angle.data.x) == 5
    assert not found.by_angle.data.joined


def test_a_sector_flattens_the_cosine_and_is_corrected():
    """The mean of cos 2φ over φ ± β is its value times sin 2β / 2β."""
    half, places = 22.5, []
    for angle in (0.0, 45.0, 90.0, 135.0):
        fine = np.linspace(angle - half, angle + half, 2001)
        square = np.mean([blur(a, wide=0.62, narrow=0.6, along=20.0) ** -2 for a in fine])
        places.append(place(angle, square**-0.5, 1e-5, half=half))
    found = mtf_isotropy(places)
    assert found.isotropy.value == pytest.approx(0.6 / 0.62, rel=1e-5)


def test_a_turning_gantry_blurs_across_the_radius():
    truth = {"wide": 0.6, "narrow": 0.6, "along": 0.0, "gantry": 0.004}
    places = [
        place(angle, blur(angle, r=r, facing=facing, **truth), 1e-5, r, facing)
        for r, base in ((20.0, 10.0), (60.0, 70.0), (100.0, 130.0))
        for angle, facing in ((base, 0.0), (base + 90, 90.0), (base + 45, 45.0))
    ]
    found = mtf_isotropy(places)
    assert found.center.value == pytest.approx(F50_SIGMA / 0.6, rel=1e-5)
    assert found.far_radial.value == pytest.approx(F50_SIGMA / 0.6, rel=1e-5)
    azimuthal = F50_SIGMA / math.hypot(0.6, 100 * 0.004)
    assert found.far_azimuthal.value == pytest.approx(azimuthal, rel=1e-5)
    assert found.largest_distance.value == pytest.approx(100.0)
    assert found.isotropy.value == pytest.approx(1.0, abs=1e-5)
    assert isinstance(found.sharpest_direction, NotMeasured)
    assert found.radial.x == pytest.approx([20.0, 60.0, 100.0])
    assert found.azimuthal.y[-1] == pytest.approx(azimuthal)
    assert len(found.by_distance.x) == 9


def test_an_even_blur_scatters_as_its_uncertainties_say():
    rng = np.random.default_rng(2)
    ratios, isotropies = [], []
    for _ in range(200):
        found = mtf_isotropy(ring(rng, 0.004, wide=0.6, narrow=0.6, along=0.0))
        ratios.append(found.scatter_ratio.value**2)
        isotropies.append(found.isotropy.value)
    assert np.mean(ratios) == pytest.approx(1.0, abs=0.2)  # chi² / 4, of 200: 1 ± 0.05
    assert 0.97 < np.median(isotropies) <= 1.0
    assert found.scatter_ratio.uncertainty == pytest.approx(1 / math.sqrt(8))


def test_uncertainties_cover_the_truth():
    """Nominal 95 % intervals of the ratio, the direction and the fitted f50 hold the truth."""
    rng = np.random.default_rng(3)
    repeats, angles = 800, tuple(range(0, 180, 15))
    blurred = {"wide": 0.7, "narrow": 0.6, "along": 30.0}
    truths = (0.6 / 0.7, 120.0, blur(0.0, **blurred))
    held = np.zeros(3)
    for _ in range(repeats):
        found = mtf_isotropy(ring(rng, 0.004, angles, **blurred))
        [(_, first), *_] = found.by_angle.samples()
        numbers = (found.isotropy, found.sharpest_direction, first)
        held += [
            abs(one.value - true) <= 1.96 * one.uncertainty
            for one, true in zip(numbers, truths, strict=True)
        ]
    share = held / repeats
    # 95 ± 0.8 % (1 sigma); a little more, as scatter widens intervals and never narrows them
    assert (share > 0.93).all(), share
    assert (share < 0.975).all(), share


def test_a_place_knows_how_it_faces_the_isocentre():
    one = place(70.0, 0.3, r=50.0, facing=30.0)
    assert one.distance.value == pytest.approx(50.0)
    assert one.facing.value == pytest.approx(30.0)
    # of a direction known to 0.1° and a place known to 0.05 mm at 50 mm
    assert one.facing.uncertainty == pytest.approx(math.hypot(0.1, math.degrees(0.001)))
    assert place(70.0, 0.3, r=50.0, facing=-80.0).facing.value == pytest.approx(80.0)
    center = place(70.0, 0.3, r=0.5)
    assert (center.facing.value, center.facing.uncertainty) == (
        45.0,
        pytest.approx(25.98, abs=0.01),
    )


def test_terms_that_cannot_be_told_are_left_out():
    one_way = [place(30.0, f50, r=r) for f50, r in ((0.31, 0.0), (0.312, 0.0), (0.309, 0.0))]
    found = mtf_isotropy(one_way)
    assert "direction" in found.isotropy.reason
    assert "distance" in found.far.reason
    assert "distance" in found.far_azimuthal.reason
    assert not found.by_angle.joined
    assert found.f50.value == pytest.approx(np.mean([0.31, 0.312, 0.309]))
    apart = [place(30.0, 0.31, r=r) for r in (0.0, 50.0, 100.0)]
    found = mtf_isotropy(apart)
    assert found.far.value == pytest.approx(0.31)
    assert isinstance(found.far_radial, NotMeasured)


def test_too_few_and_misuse():
    assert "at least 2" in mtf_isotropy([place(0, 0.3)]).reason
    with pytest.raises(ArgumentError, match="must have an uncertainty"):
        mtf_isotropy([place(0, 0.3, u=0.0), place(90, 0.3)])
    with pytest.raises(ArgumentError, match="must be greater than 0"):
        mtf_isotropy([place(0, -0.3), place(90, 0.3)])
    with pytest.raises(ArgumentError, match="half_width_deg"):
        mtf_isotropy([place(0, 0.3, half=100.0), place(90, 0.3)])
