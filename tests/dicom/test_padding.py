"""Pixels that mean "no data here" are found and masked, declared or not; CT numbers are not."""

from __future__ import annotations

import numpy as np
import pytest
import series_writer as sw

from ct_measure_plugin.dicom import read_series


def codes(volume):
    return {caution.code for caution in volume.cautions}


def round_field(fill, *, signed=True):
    """Return a water phantom whose corners hold a fill: HU if signed, HU + 1024 if not."""
    stored = sw.noise((32, 32))
    stored = stored - np.int16(1024) if signed else stored.astype(np.uint16)
    y, x = np.mgrid[:32, :32]
    outside = np.hypot(y - 15.5, x - 15.5) > 16
    stored[outside] = fill
    return stored, outside


def save(tmp_path, stored, **changes):
    sw.save(sw.ct_slice(stored, **changes), tmp_path / "one")
    return read_series(tmp_path)


def set_padding(ds, value, vr, limit=None):
    ds.add_new("PixelPaddingValue", vr, value)
    if limit is not None:
        ds.add_new("PixelPaddingRangeLimit", vr, limit)
    return ds


def test_a_declared_value_is_masked(tmp_path):
    stored, outside = round_field(-2000)
    ds = set_padding(sw.ct_slice(stored, RescaleIntercept="0"), -2000, "SS")
    sw.save(ds, tmp_path / "one")
    volume = read_series(tmp_path)
    assert np.array_equal(volume.padding(0), outside)
    assert codes(volume) == {"padding"}


def test_a_declared_range_is_masked_whole(tmp_path):
    stored, outside = round_field(-2000)
    stored[outside] += np.arange(outside.sum()).astype(np.int16) % 3
    sw.save(
        set_padding(sw.ct_slice(stored, RescaleIntercept="0"), -2000, "SS", -1998), tmp_path / "one"
    )
    volume = read_series(tmp_path)
    assert np.array_equal(volume.padding(0), outside)
    assert codes(volume) == {"padding"}


@pytest.mark.parametrize("syntax", ["explicit", "implicit", "big"])
def test_an_unsigned_value_for_signed_pixels_is_read_with_their_sign(tmp_path, syntax):
    """63536 is the unsigned reading of −2000."""
    stored, outside = round_field(-2000)
    ds = set_padding(sw.ct_slice(stored, RescaleIntercept="0"), 63536, "US")
    sw.save(ds, tmp_path / "one", sw.NATIVE[syntax])
    volume = read_series(tmp_path)
    assert np.array_equal(volume.padding(0), outside)
    # implicit encoding carries no type that could be wrong
    assert ("padding-mistyped" in codes(volume)) == (syntax != "implicit")


@pytest.mark.parametrize("fill", [-1500, -2000, -3024, -8192])
def test_a_fill_that_nobody_declared_is_masked(tmp_path, fill):
    stored, outside = round_field(fill)
    volume = save(tmp_path, stored, RescaleIntercept="0")
    assert np.array_equal(volume.padding(0), outside)
    assert codes(volume) == {"padding-undeclared"}


def test_a_fill_beside_the_declared_one_is_masked_too(tmp_path):
    stored, outside = round_field(-2000)
    stored[0, 0] = -3000
    sw.save(set_padding(sw.ct_slice(stored, RescaleIntercept="0"), -2000, "SS"), tmp_path / "one")
    volume = read_series(tmp_path)
    assert np.array_equal(volume.padding(0), outside)
    assert codes(volume) == {"padding", "padding-undeclared"}


def test_cold_noise_is_no_padding(tmp_path):
    """Air noise reaches below −1000 HU; down to −1499 it stays what it is."""
    stored = sw.noise((32, 32))
    stored[3, 3] = 1024 - 1499
    stored -= 1024
    volume = save(tmp_path, stored, RescaleIntercept="0")
    assert volume.padding(0) is None
    assert codes(volume) == set()


def test_a_declared_value_that_is_a_ct_number_of_the_object_is_not_masked(tmp_path):
    """A header that calls 0 HU padding would punch holes into water."""
    stored = sw.noise((32, 32)) - 1024
    sw.save(set_padding(sw.ct_slice(stored, RescaleIntercept="0"), 0, "SS"), tmp_path / "one")
    volume = read_series(tmp_path)
    assert volume.padding(0) is None
    assert "possible CT number" in next(c.text for c in volume.cautions if c.code == "padding")


def test_a_declared_value_that_fills_the_corners_is_masked(tmp_path):
    stored, outside = round_field(7)
    stored[~outside] = np.where(stored[~outside] == 7, 8, stored[~outside])
    sw.save(set_padding(sw.ct_slice(stored, RescaleIntercept="0"), 7, "SS"), tmp_path / "one")
    assert np.array_equal(read_series(tmp_path).padding(0), outside)


def test_a_fill_in_cells_that_cannot_hold_it_survives(tmp_path):
    """12 bit unsigned pixels with 63536 outside: −2000, not 2096 as masking the bits gives."""
    stored, outside = round_field(63536, signed=False)
    volume = save(tmp_path, stored, BitsStored=12, HighBit=11)
    assert np.unique(volume.hu[0][outside]).tolist() == [-3024]
    assert np.array_equal(volume.padding(0), outside)
    assert np.array_equal(volume.hu[0][~outside], stored[~outside].astype(int) - 1024)


def test_padding_differs_from_slice_to_slice(tmp_path):
    first, outside = round_field(-2000)
    second = sw.noise((32, 32)) - np.int16(1024)
    sw.write_series(tmp_path, np.stack([first, second]), sw.line(2), RescaleIntercept="0")
    volume = read_series(tmp_path)
    assert np.array_equal(volume.padding(0), outside)
    assert volume.padding(1) is None


def test_in_other_units_no_value_is_impossible(tmp_path):
    stored, _ = round_field(-2000)
    volume = save(tmp_path, stored, RescaleType="US")
    assert volume.padding_hu is None
