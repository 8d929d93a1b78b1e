"""The slice profile through the door that plans, docks and scripts use, on the sample volumes."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import ct_measure_plugin as ctm

SAMPLES = Path(__file__).parents[2] / "sample_volumes"


@pytest.fixture(scope="module")
def thin():
    """A trapezoid of 2.5 mm FWHM whose sides are 1 mm wide, every 0.5 mm."""
    return ctm.read_series(SAMPLES / "thin-steps")


@pytest.mark.parametrize("place", [(22.0, -26.0), (44.0, -8.0)])
def test_the_sample_beads_give_their_truth(thin, place):
    box = ctm.regions.Box(place, (13.0, 13.0), z_mm=(44.0, 56.0))
    found = ctm.measure("slice_profile", thin, box, object_size_mm=0.5)
    assert abs(found.fwhm.value - 2.5) < 3 * found.fwhm.uncertainty
    assert abs(found.fwtm.value - 3.3) < 3 * found.fwtm.uncertainty
    assert found.fwtm.uncertainty < 0.1
    truth = np.sinc(2.5 * found.mtf.x) * np.sinc(found.mtf.x)
    np.testing.assert_allclose(found.mtf.y, truth, atol=0.03)
    assert found.center_mm == pytest.approx(place, abs=0.05)


@pytest.mark.parametrize(("place", "towards"), [((8.0, 10.0), 1), ((32.0, 14.0), -1)])
def test_the_sample_ramps_give_their_truth(thin, place, towards):
    box = ctm.regions.Box(place, (16.0, 30.0), z_mm=(44.0, 56.0))
    found = ctm.measure(
        "slice_profile", thin, box, target="ramp", object_size_mm=0.3, in_plane_fwhm_mm=0.9
    )
    assert found.angle.value == pytest.approx(25.0, abs=0.1)
    assert abs(found.fwhm.value - 2.5) < 3 * found.fwhm.uncertainty
    assert abs(found.fwtm.value - 3.3) < 3 * found.fwtm.uncertainty
    assert found.fwtm.uncertainty < 0.05
    one = ctm.measure(
        "slice_profile",
        thin,
        replace(box, z_mm=50.0),
        target="ramp",
        object_size_mm=0.3,
        in_plane_fwhm_mm=0.9,
        angle_deg=25.0,
        climb_deg=0.0 if towards > 0 else 180.0,
    )
    assert abs(one.fwhm.value - 2.5) < 3 * one.fwhm.uncertainty


def test_thick_steps_of_a_ramp_serve_too():
    """A rectangle of 2.5 mm, every 2.5 mm."""
    volume = ctm.read_series(SAMPLES / "standard")
    box = ctm.regions.Box((8.0, 10.0), (16.0, 30.0), z_mm=(44.0, 56.0))
    found = ctm.measure(
        "slice_profile", volume, box, target="ramp", object_size_mm=0.3, in_plane_fwhm_mm=0.9
    )
    assert abs(found.fwhm.value - 2.5) < 3 * found.fwhm.uncertainty
    # how sharp its sides are hangs on the resolution in the slice, which a Gaussian stands for
    assert abs(found.fwtm.value - 2.5) < 3 * found.fwtm.uncertainty
    assert found.angle.value == pytest.approx(25.0, abs=0.2)


def test_uneven_or_leaning_slices_and_clipping_are_refused(thin):
    box = ctm.regions.Box((22.0, -26.0), (13.0, 13.0), z_mm=(44.0, 57.5))
    positions = thin.positions_mm.copy()
    positions[12:] += 0.4
    for volume, words in (
        (replace(thin, slice_positions_mm=positions), "not evenly spaced"),
        (replace(thin, tilt_deg=12.0), "lean by 12.0°"),
        (replace(thin, representable_hu=(-1024.0, 600.0)), "clipped"),
    ):
        found = ctm.measure("slice_profile", volume, box, object_size_mm=0.5)
        assert not found
        assert words in found.reason
