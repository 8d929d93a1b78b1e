"""The circle and the axis of a cylinder, against places that are known."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import erf

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.cylinder import find_cylinder, given_cylinder
from ct_measure_plugin.physics.cylinder_circle import Circle, find_circle
from ct_measure_plugin.physics.results import NotMeasured

SPACING = (0.8, 0.8)


def disc(center, radius=85.3, *, shape=(256, 256), spacing=SPACING, blur=0.7, low=-1000.0):
    """Return a disc of 0 HU in air with an edge that is an error function of the distance."""
    y = np.arange(shape[0])[:, None] * spacing[0] - center[0]
    x = np.arange(shape[1])[None, :] * spacing[1] - center[1]
    inside = (1 - erf((np.hypot(y, x) - radius) / blur / np.sqrt(2))) / 2
    return low * (1 - inside)


def test_a_blurred_disc_is_found_within_its_uncertainty():
    """R 85.3 mm, pixels of 0.8 mm, blur 0.7 mm, noise 20 HU: centre and radius to 0.005 mm."""
    rng = np.random.default_rng(1)
    errors = []
    for _ in range(30):
        center = 100 + rng.uniform(-3, 3, 2)
        found = find_circle(disc(center) + rng.normal(0, 20, (256, 256)), SPACING)
        off = [*(np.array(found.center_mm) - center), found.radius_mm - 85.3]
        assert np.abs(off).max() < 0.006
        errors.append(np.array(off) / (found.doubt_mm * np.array([2**0.5, 2**0.5, 1])))
    # 90 values, and the doubts themselves are known to 12 %: their spread to 14 %
    assert np.sqrt(np.mean(np.square(errors))) == pytest.approx(1.0, abs=0.3)


@pytest.mark.parametrize("spacing", [(0.8, 0.5), (0.5, 0.9)])
def test_anisotropic_pixels_and_dark_cylinders(spacing):
    image = disc((70.2, 61.7), 40.0, shape=(280, 260), spacing=spacing)
    found = find_circle(image, spacing)
    assert found.center_mm == pytest.approx((70.2, 61.7), abs=0.01)
    assert found.radius_mm == pytest.approx(40.0, abs=0.02)
    assert found.ellipticity < 1e-3
    assert (found.inside, found.outside) == pytest.approx((0, -1000), abs=0.5)


def test_a_table_a_wall_and_fill_outside_the_reconstruction_do_not_pull_it():
    image = disc((100.3, 101.1), 70.0)
    y, x = np.mgrid[:256, :256] * 0.8
    r = np.hypot(y - 100.3, x - 101.1)
    image[(r < 70.0) & (r > 64.0)] += 120.0  # a wall
    image[(y > 169.5) & (y < 174) & (np.abs(x - 100) < 80)] = 60.0  # a table that touches
    image[np.hypot(y - 102, x - 102) > 101.5] = -3024.0
    found = find_circle(image, SPACING)
    assert found.center_mm == pytest.approx((100.3, 101.1), abs=0.03)
    assert found.radius_mm == pytest.approx(70.0, abs=0.05)


def square(y, x):
    return np.maximum(np.abs(y - 100), np.abs(x - 100)) < 60


def ellipse(y, x):
    return np.hypot((y - 100) / 60, (x - 100) / 66) < 1


def cut_off(y, x):
    return np.hypot(y - 20, x - 100) < 60


def nothing(y, x):
    return np.zeros_like(y + x, dtype=bool)


@pytest.mark.parametrize("shape", [square, ellipse, cut_off, nothing])
def test_what_is_no_cylinder_is_refused(shape):
    y, x = np.mgrid[:256, :256] * 0.8
    image = np.where(shape(y, x), 0.0, -1000.0)
    found = find_circle(image, SPACING)
    assert isinstance(found, NotMeasured)
    assert found.remedy


def test_noise_alone_is_no_cylinder():
    noise = np.random.default_rng(2).normal(0, 20, (128, 128))
    assert isinstance(find_circle(noise, SPACING), NotMeasured)


# --- the axis ------------------------------------------------------------------------------------


def stack(slope, count=9, dz=5.0, noise=0.0, radius=70.0):
    rng = np.random.default_rng(3)
    z = dz * np.arange(count)
    planes = [disc((100 + slope[0] * p, 101 + slope[1] * p), radius) for p in z]
    return np.array(planes) + noise * rng.standard_normal((count, 256, 256)), z


def test_the_tilt_of_the_axis():
    planes, z = stack((0.02, -0.015), noise=20.0)
    found = find_cylinder(planes, spacing_mm=SPACING, z_mm=z)
    true = np.degrees(np.arctan(0.025))
    assert abs(found.tilt.value - true) < 3 * found.tilt.uncertainty
    assert found.tilt.uncertainty < 0.01
    assert found.moves
    assert found.centers_mm[-1] == pytest.approx((100.8, 100.4), abs=0.01)
    upright, z = stack((0.0, 0.0), noise=20.0)
    still = find_cylinder(upright, spacing_mm=SPACING, z_mm=z)
    assert not still.moves
    assert np.ptp(still.centers_mm, axis=0).max() == 0
    assert still.tilt.value < 4 * still.tilt.uncertainty + 1e-6


def test_the_ends_of_a_cylinder_are_left_out():
    planes, z = stack((0.0, 0.0))
    planes[0] = -1000.0
    planes[8] = disc((100, 101), 50.0)
    found = find_cylinder(planes, spacing_mm=SPACING, z_mm=z)
    assert found.left_out == (0, 8)
    assert list(found.z_mm) == list(z[1:8])
    planes[1:5] = -1000.0
    refused = find_cylinder(planes, spacing_mm=SPACING, z_mm=z)
    assert isinstance(refused, NotMeasured)
    assert "of 9 slices" in refused.reason


def test_a_cylinder_placed_by_hand():
    found = given_cylinder((10.0, 12.0), 8.0, [0.0, 1.0])
    assert (found.radius_mm, found.tilt, found.moves) == (8.0, None, False)
    with pytest.raises(ArgumentError, match="'radius_mm' must be greater than 0"):
        given_cylinder((1.0, 1.0), 0.0, [0.0])


def test_one_slice_has_no_tilt():
    found = find_cylinder([disc((100, 101))], spacing_mm=SPACING, z_mm=[0.0])
    assert found.tilt is None
    assert isinstance(find_circle(disc((100, 101)), SPACING), Circle)


def test_an_image_without_values_is_refused():
    refused = find_circle(np.full((90, 90), np.nan), SPACING)
    assert isinstance(refused, NotMeasured)
    assert refused.reason == "the image holds no finite value"
