"""The disc MTF through the door that plans, docks and scripts use."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from truth_images import GAUSS, disc_image

import ct_measure_plugin as ctm

SAMPLES = Path(__file__).parents[2] / "sample_volumes"


@pytest.fixture(scope="module")
def standard():
    return ctm.read_series(SAMPLES / "standard")


def test_the_sample_rods_give_their_truth(standard):
    """sample_volumes/README.md: f50 0.4683, f10 0.7653, to 0.01 of the MTF's value at 0; the air
    rod, 11 mm across, at y -30.0, x 9.4."""
    rod = ctm.regions.Disc((-30.0, 9.4), 10.0, z_mm=(28.0, 34.5))
    found = ctm.measure("disc_mtf", standard, rod)
    assert found.contrast.value == pytest.approx(-999, abs=10)
    assert found.radius.value == pytest.approx(5.5, abs=0.02)
    assert found.center_mm == pytest.approx((-30.0, 9.4), abs=0.02)
    for quantity, truth, level in ((found.f50, 0.4683, 0.5), (found.f10, 0.7653, 0.1)):
        i = int(np.argmax(found.mtf.y < level))
        rise, run = found.mtf.y[i - 2 : i + 2 : 3], found.mtf.x[i - 2 : i + 2 : 3]
        slope = abs(np.diff(rise)[0] / np.diff(run)[0])
        assert abs(quantity.value - truth) < 0.01 / slope + 3 * quantity.uncertainty


def test_directions_are_relative_to_the_isocentre():
    """A rod whose blur is wider across the line to the isocentre reads less azimuthally."""
    from scipy import ndimage

    y, x = (np.mgrid[:480, :480] - 239.5) * 0.1
    sharp = 100.0 * (np.hypot(y - 10, x) < 8.0)  # below the isocentre: radial is vertical
    sharp = ndimage.gaussian_filter(sharp, (0.5 / 0.1, 0.8 / 0.1))
    volume = ctm.Volume(sharp[2::5, 2::5][None], (1.0, 0.5, 0.5), origin_mm=(0.0, -23.75, -23.75))
    rod = ctm.regions.Disc((10.0, 0.0), 13.0)
    found = {
        way: ctm.measure("disc_mtf", volume, rod, direction=way, half_width_deg=15.0).f50.value
        for way in ("radial", "azimuthal", "angle", "all")
    }
    # sectors of ±15° mix in 2.2 % of the other variance; rasterised outline: 3 %
    assert found["radial"] == pytest.approx(0.187391 / 0.51, rel=0.03)
    assert found["azimuthal"] == pytest.approx(0.187391 / 0.79, rel=0.03)
    assert found["angle"] == pytest.approx(found["azimuthal"], rel=1e-3)
    assert found["azimuthal"] < found["all"] < found["radial"]
    moved = ctm.measure(
        "disc_mtf", volume, rod, direction="radial", half_width_deg=15.0, isocentre_mm=(10.0, 50.0)
    )
    assert moved.f50.value == pytest.approx(found["azimuthal"], rel=1e-3)
    at_centre = ctm.measure("disc_mtf", volume, rod, direction="radial", isocentre_mm=(10.0, 0.2))
    assert not at_centre
    assert "no direction is radial" in at_centre.reason


def test_the_isocentre_comes_from_the_header_where_it_says():
    from ct_measure_plugin.measurements.isocentre import isocentre

    hu = np.zeros((1, 21, 21))
    assert isocentre(ctm.Volume(hu, (1.0, 0.5, 0.5), origin_mm=(0.0, 3.0, 4.0))) == (8.0, 9.0)
    facts = (ctm.physics.Acquisition(isocentre_mm=(11.0, -7.0, 300.0)),)
    # rows down the patient's left: the frame's z, y, x along LPS z, x, -y
    turned = np.array([[0.0, 0.0, 1.0], [1.0, 0.0, 0.0], [0.0, -1.0, 0.0]])
    volume = ctm.Volume(hu, (1.0, 0.5, 0.5), acquisition=facts, direction_lps=turned)
    assert isocentre(volume) == (11.0, 7.0)
    assert isocentre(volume, (1.0, 2.0)) == (1.0, 2.0)


def test_lean_needs_even_slices():
    plane = disc_image(GAUSS, 6.0, shape=(56, 56))
    stack = np.stack([plane] * 3)
    even = ctm.Volume(stack, (2.0, 0.5, 0.5))
    odd = ctm.Volume(stack, (2.0, 0.5, 0.5), slice_positions_mm=np.array([0.0, 2.0, 5.0]))
    box = ctm.regions.Box((13.75, 13.75), (28.0, 28.0))
    assert ctm.measure("disc_mtf", even, box).lean.value == pytest.approx(0.0, abs=1e-3)
    assert ctm.measure("disc_mtf", odd, box).lean is None


def test_what_is_known_of_the_volume_is_told_with_the_curve():
    """Lossy compression, above all: it smooths, or rings."""
    plane = disc_image(GAUSS, 6.0, shape=(56, 56))
    lossy = ctm.physics.Caution("lossy-compression", "Pixels are lossy.", "Export them again.")
    volume = ctm.Volume(plane[None], (2.0, 0.5, 0.5), cautions=(lossy,))
    found = ctm.measure("disc_mtf", volume, ctm.regions.Disc((13.75, 13.75), 12.0))
    assert found.f50.value == pytest.approx(0.187391 / 0.6, rel=0.01)
    assert lossy in found.cautions
