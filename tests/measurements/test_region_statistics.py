"""What a region's pixels are, and the answer to every bad question."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError, RegionError
from ct_measure_plugin.measurements import measure
from ct_measure_plugin.physics.regions import (
    Box,
    Disc,
    Ellipsoid,
    Labels,
    Mask,
    Path,
    Polygon,
    Segment,
)
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.volume import Volume

NAME = "region_statistics"


def noise(shape=(3, 64, 64), spacing=(2.0, 0.5, 0.5), **more) -> Volume:
    values = np.rint(np.random.default_rng(5).normal(40, 12, shape)).astype(np.int16)
    return Volume(values, spacing, **more)


def caution(result, code: str):
    return next((one for one in result.cautions if one.code == code), None)


DISC = Disc((15.75, 15.75), 9.0, z_mm=2.0)


def test_saturated_voxels_are_left_out_counted_and_cautioned():
    volume = noise(representable_hu=(-1024.0, 3071.0))
    hu = volume.hu.copy()
    hu[1, 30, 28:33] = 3071
    hu[1, 34, 30] = -1024
    clean, found = measure(NAME, volume, DISC), measure(NAME, replace(volume, hu=hu), DISC)
    assert caution(clean, "clipped-values") is None
    assert found.n.value == clean.n.value - 6
    assert found.maximum.value < 3071
    assert f"6 of {clean.n.value:.0f} pixels" in caution(found, "clipped-values").text
    assert caution(found, "clipped-values").kind.level == "warning"
    kept = hu[1].astype(float)
    kept[kept >= 3071] = np.nan
    kept[kept <= -1024] = np.nan
    twin = measure(NAME, Volume(kept[None], volume.spacing_mm), replace(DISC, z_mm=None))
    assert found.mean.value == pytest.approx(twin.mean.value, rel=1e-12)


def test_a_region_of_nothing_but_saturation_is_not_measured():
    volume = Volume(
        np.full((1, 40, 40), 3071, np.int16), (1, 0.5, 0.5), representable_hu=(-1024.0, 3071.0)
    )
    found = measure(NAME, volume, Disc((10, 10), 4))
    assert isinstance(found, NotMeasured)
    assert "holds only saturated pixels" in found.reason
    assert caution(found, "clipped-values") is not None


def test_padding_is_left_out_counted_and_cautioned():
    padding = np.tile([-2000.0, -2000.0], (3, 1))
    volume = noise(padding_hu=padding)
    hu = volume.hu.copy()
    hu[1, 28:30, 28:33] = -2000
    found = measure(NAME, replace(volume, hu=hu), DISC)
    assert "10 pixels of the region are padding" in caution(found, "padding-excluded").text
    assert found.minimum.value > -2000
    hu[1] = -2000
    empty = measure(NAME, replace(volume, hu=hu), DISC)
    assert isinstance(empty, NotMeasured)
    assert empty.reason == "the region holds only padding"


def test_values_without_a_number_are_left_out():
    hu = noise().hu.astype(float)
    hu[1, 30, 30:33] = np.nan
    found = measure(NAME, replace(noise(), hu=hu), DISC)
    assert "3 pixels of the region hold no finite value" in caution(found, "not-finite").text
    assert math.isfinite(found.mean.value)
    hu[:] = np.nan
    assert isinstance(measure(NAME, replace(noise(), hu=hu), DISC), NotMeasured)


def test_values_without_a_number_beside_the_region_change_nothing():
    """In the corner of the rectangle around a disc."""
    hu = noise().hu.astype(float)
    plain = measure(NAME, replace(noise(), hu=hu), DISC)
    hu[1, 16, 16] = np.nan  # 7.75 mm from the middle both ways, of a radius of 9
    spoilt = measure(NAME, replace(noise(), hu=hu), DISC)
    assert spoilt.mean == plain.mean


def test_what_lies_outside_the_image_is_told():
    half = measure(NAME, noise(), Box((15.75, -0.25), (8.0, 8.0), z_mm=2.0))
    assert "50.0 % of the region lies outside" in caution(half, "outside-image").text
    assert half.area.value == pytest.approx(32.0)
    above = measure(NAME, noise(), replace(DISC, z_mm=(0.0, 7.5)))
    assert "2.5 mm beyond the first or last slice" in caution(above, "outside-image").text
    assert caution(measure(NAME, noise(), replace(DISC, z_mm=(0.0, 4.0))), "outside-image") is None


@pytest.mark.parametrize(
    ("region", "reason"),
    [
        (Disc((900.0, 900.0), 3.0), "the region lies outside the volume"),
        (Disc((16.0, 16.0), 3.0, z_mm=900.0), "the region lies outside the volume"),
        (Ellipsoid((16.0, 16.0), (3.0, 3.0), 3.0, z_mm=90.0), "the region lies outside the volume"),
        (Disc((16.0, 16.0), 0.2, z_mm=2.0), "the region holds 1 pixel; at least 9 are needed"),
        (Box((16.0, 16.0), (0.5, 0.5), z_mm=2.0), "the region holds 1 pixel; at least 9"),
        (replace(DISC, values=(900.0, 901.0)), "no pixel of the region lies from 900 to 901"),
    ],
    ids=["outside", "other slice", "other slices", "small disc", "one pixel", "threshold"],
)
def test_what_cannot_be_measured_says_why(region, reason):
    found = measure(NAME, noise(), region)
    assert isinstance(found, NotMeasured)
    assert found.reason.startswith(reason)
    assert found.remedy


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: Polygon(((0, 0), (4, 4), (4, 0), (0, 4))), "must not cross itself"),
        (lambda: Polygon(((0, 0), (0, 4), (0, 9))), "must enclose an area"),
        (lambda: Mask(np.zeros((3, 3), bool), (1, 1, 1)), "must hold at least one pixel"),
        (lambda: Segment((0, 0), (9, 9)), "must be greater than 0 to enclose pixels"),
        (lambda: Path(((0, 0), (9, 9))), "must be greater than 0 to enclose pixels"),
    ],
    ids=["self-crossing", "zero area", "empty label", "line without width", "path without width"],
)
def test_regions_that_are_none_are_refused_by_name(make, message):
    with pytest.raises(RegionError, match=message):
        measure(NAME, noise(), make())


def test_along_a_path_the_pixels_within_its_width_count():
    """The same as in the polygon around them, which the path says."""
    volume = noise()
    path = Path(((8.0, 5.0), (8.0, 25.0), (24.0, 25.0)), 5.0, z_mm=0.0)
    along, around = measure(NAME, volume, path), measure(NAME, volume, path.strip())
    assert along.mean == around.mean
    # length times width, less half of the overlap's square: the outer corner is cut off
    assert along.area.value == pytest.approx(36 * 5 - 2.5**2 / 2, rel=1e-9)


def test_a_range_of_values_counts_only_what_lies_within():
    volume = noise()
    found = measure(NAME, volume, replace(DISC, values=(30.0, 50.0)))
    whole = measure(NAME, volume, DISC, ranges=((30.0, 50.0),))
    assert (found.minimum.value, found.maximum.value) == (30.0, 50.0)
    assert found.area.value == pytest.approx(whole.area.value * whole.share.value / 100)
    said = caution(found, "threshold").text
    assert (
        said
        == f"Only values from 30 to 50 count: {found.n.value:.0f} of {whole.n.value:.0f} pixels."
    )
    upward = measure(NAME, volume, replace(DISC, values=(45.0, math.inf)))
    assert upward.minimum.value == 45.0


def test_a_measurement_that_knows_no_thresholds_refuses_them():
    with pytest.raises(RegionError, match="'values' must be left out for noise_power"):
        measure("noise_power", noise(), replace(DISC, z_mm=None, values=(30.0, 50.0)))


def test_a_mask_of_another_shape_and_spacing_measures_the_same_place():
    """A ramp along x: its mean is the ramp at the mask's centroid, on whatever grid."""
    ramp = np.broadcast_to(np.arange(80.0), (4, 60, 80)).copy()
    volume = Volume(ramp, (2.0, 0.6, 0.6))
    inside = np.zeros((2, 9, 11), bool)
    inside[:, 2:7, 3:9] = True
    mask = Mask(inside, (3.0, 1.3, 1.7), (1.0, 8.0, 12.0))
    found = measure(NAME, volume, mask)
    centroid_mm = 12.0 + 1.7 * 5.5
    # pixels at the border do not know where in them the mask lies: a hundredth of a pixel
    assert found.mean.value == pytest.approx(centroid_mm / 0.6, abs=0.02)
    assert found.volume.value == pytest.approx(mask.area_mm2 * 3.0, rel=1e-9)


def test_an_ellipsoid_has_its_volume_and_slices_as_curves():
    volume = noise((30, 64, 64), (1.0, 0.5, 0.5))
    body = Ellipsoid((15.75, 15.75), (6.0, 8.0), 7.3, 20.0, z_mm=14.2)
    found = measure(NAME, volume, body)
    assert found.volume.value == pytest.approx(body.volume_mm3, rel=1e-9)
    assert found.slice_mean.x[0] == 7.0  # its slab ends at 7.5, the ellipsoid at 6.9
    assert found.slice_mean.x[-1] == 21.0  # it ends where the slab at 22 begins
    assert len(found.slice_sd.x) == 15
    flat = measure(NAME, volume, body, along_z=False)
    assert flat.slice_mean is None
    assert flat.mean == found.mean


def test_choices_of_the_user_arrive():
    found = measure(
        NAME, noise(), DISC, percentiles=(5.0, 95.0), ranges=((0.0, 40.0),), bin_width=10.0
    )
    assert found.percentiles.x.tolist() == [5.0, 95.0]
    assert found.share.unit == "%"
    assert np.diff(found.histogram.x)[0] == 10.0
    centers = measure(NAME, noise(), DISC, coverage="center")
    assert centers.area.value == pytest.approx(0.25 * centers.n.value)
    with pytest.raises(ArgumentError, match="bin_width"):
        measure(NAME, noise(), DISC, bin_width=0.0)


def odd(values: np.ndarray | float) -> Volume:
    return Volume(np.zeros((3, 40, 40)) + values, (2.0, 1.0, 1.0))


INSIDE = Disc((20.0, 20.0), 6.0, z_mm=0.0)
LABELLED = Labels(np.pad(np.ones((3, 20, 20), int), ((0, 0), (5, 15), (5, 15))), (2.0, 1.0, 1.0))


@pytest.mark.parametrize("spoilt", [np.nan, np.inf], ids=["nan", "inf"])
def test_a_region_without_a_finite_value_says_so(spoilt):
    """Larger would not help."""
    found = measure("region_statistics", odd(spoilt), INSIDE)
    assert not found
    assert "none of the region's" in found.reason
    assert "finite value" in found.reason
    assert "larger" not in found.remedy
    assert measure("region_contrast", odd(spoilt), [INSIDE, INSIDE]).remedy == found.remedy


def test_pixels_without_a_value_do_not_count_towards_the_least():
    """5 of 110 pixels hold one: as few as a region of 5 pixels."""
    holes = np.full((40, 40), np.nan)
    holes[20, 18:23] = 1.0
    found = measure("region_statistics", odd(holes), INSIDE)
    assert not found
    assert found.reason.startswith("5 of the region's")


@pytest.mark.filterwarnings("error")
@pytest.mark.parametrize("scale", [1e200, 1e76, 1e-200], ids=str)
def test_values_beyond_arithmetic_are_named(scale):
    noise = np.random.default_rng(1).normal(0, scale, (3, 40, 40))
    answers = [
        measure("region_statistics", odd(noise), INSIDE),
        measure("region_statistics", odd(noise), Disc((20.0, 20.0), 6.0)),
        measure("label_statistics", odd(noise), LABELLED),
        measure("region_contrast", odd(noise), [INSIDE, Disc((10.0, 10.0), 6.0, z_mm=0.0)]),
    ]
    for found in answers:
        assert not found
        assert "beyond computer arithmetic" in found.reason
        assert "scale" in found.remedy


@pytest.mark.filterwarnings("error")
@pytest.mark.parametrize("scale", [1e25, 1e-50], ids=str)
def test_values_just_within_arithmetic_are_measured(scale):
    noise = np.random.default_rng(1).normal(0, scale, (3, 40, 40))
    plain = measure("region_statistics", odd(noise / scale), INSIDE, bin_width=1.0)
    found = measure("region_statistics", odd(noise), INSIDE, bin_width=scale, bin_edge=-scale / 2)
    assert found.sd.value == pytest.approx(scale * plain.sd.value)
    assert found.mean.uncertainty == pytest.approx(scale * plain.mean.uncertainty)


def test_shares_say_which_range_each_number_stands_for():
    noise = np.random.default_rng(1).normal(0, 10, (40, 40))
    found = measure("region_statistics", odd(noise), INSIDE, ranges=((-10.0, 0.0), (0.0, math.inf)))
    assert found.shares.x_name == "range, 1: -10 to 0 HU, 2: 0 to inf HU"
    assert found.share.value == found.shares.y[0]
