"""Stored value → CT number: each slice by its own rescale, exactly."""

from __future__ import annotations

import numpy as np
import pytest
import series_writer as sw

from ct_measure_plugin.dicom import read_series, scan_folder

STORED = sw.noise((4, 8, 8))


def codes(volume):
    return {caution.code for caution in volume.cautions}


def one(tmp_path, stored, **changes):
    sw.save(sw.ct_slice(np.asarray(stored), **changes), tmp_path / "one")
    return read_series(tmp_path)


def test_the_worked_values_of_the_rescale(tmp_path):
    """1024 · 1 − 1024 = 0 and 200 · 2 − 1024 = −624, exactly."""
    sw.save(sw.ct_slice(np.full((4, 4), 1024, np.uint16)), tmp_path / "a")
    ds = sw.ct_slice(np.full((4, 4), 200, np.uint16), position=(0, 0, 2), RescaleSlope="2")
    sw.save(ds, tmp_path / "b")
    volume = read_series(tmp_path)
    assert volume.hu.dtype == np.int16
    assert np.unique(volume.hu[0]).tolist() == [0]
    assert np.unique(volume.hu[1]).tolist() == [-624]


def test_each_slice_has_its_own_slope_and_intercept(tmp_path):
    sw.write_series(
        tmp_path,
        STORED,
        sw.line(4),
        RescaleSlope=lambda k: str(k + 1),
        RescaleIntercept=lambda k: str(-1024 + 10 * k),
    )
    volume = read_series(tmp_path)
    expected = [(k + 1) * STORED[k].astype(int) - 1024 + 10 * k for k in range(4)]
    assert volume.hu.dtype == np.int16
    assert np.array_equal(volume.hu, expected)
    assert volume.representable_hu is None  # every slice has limits of its own


@pytest.mark.parametrize(
    ("slope", "intercept"), [("0.5", "-1024"), ("1", "-1024.5"), ("1.25e-1", "3")]
)
def test_fractions_become_float32_that_is_right_to_its_last_bit(tmp_path, slope, intercept):
    volume = one(tmp_path, STORED[0], RescaleSlope=slope, RescaleIntercept=intercept)
    assert volume.hu.dtype == np.float32
    exact = float(slope) * STORED[0].astype(np.float64) + float(intercept)
    assert np.array_equal(volume.hu[0], exact.astype(np.float32))


def test_whole_values_too_large_for_16_bits_become_float32(tmp_path):
    stored = np.array([[0, 65535], [1, 40000]], np.uint16)
    volume = one(tmp_path, stored)
    assert volume.hu.dtype == np.float32
    assert volume.hu[0].tolist() == [[-1024, 64511], [-1023, 38976]]


def test_unsigned_values_above_32767_that_fit_after_rescale_stay_whole(tmp_path):
    stored = np.array([[32768, 65535], [0, 40000]], np.uint16)
    volume = one(tmp_path, stored, RescaleIntercept="-32768")
    assert volume.hu.dtype == np.int16
    assert volume.hu[0].tolist() == [[0, 32767], [-32768, 7232]]


@pytest.mark.parametrize("dtype", [np.uint8, np.int8, np.uint16, np.int16, np.uint32, np.int32])
def test_every_cell_width_and_sign(tmp_path, dtype):
    info = np.iinfo(dtype)
    stored = np.array([[info.min, info.max], [1, info.max // 2]], dtype)
    volume = one(tmp_path, stored, RescaleIntercept="0")
    exact = stored.astype(np.float64)
    assert np.array_equal(volume.hu[0], exact if volume.hu.dtype == np.int16 else np.float32(exact))
    assert volume.representable_hu == (info.min, info.max)


def test_bits_above_those_in_use_are_cleared(tmp_path):
    """PS3.5, 8.1.1: they may hold an overlay plane of old files."""
    stored = np.array([[5, 4095], [0, 1000]], np.uint16)
    overlay = np.array([[0x8000, 0xF000], [0x1000, 0]], np.uint16)
    volume = one(tmp_path, stored | overlay, BitsStored=12, HighBit=11)
    assert np.array_equal(volume.hu[0], stored.astype(int) - 1024)
    assert volume.representable_hu == (-1024, 3071)


def test_signed_values_without_sign_extension_are_extended(tmp_path):
    signed = np.array([[-2000, 5], [-1, 2047]], np.int16)
    volume = one(tmp_path, signed & 0x0FFF, BitsStored=12, HighBit=11, RescaleIntercept="0")
    assert np.array_equal(volume.hu[0], signed)


def test_a_high_bit_above_the_lowest_bits_shifts(tmp_path):
    stored = np.array([[5, 4095], [0, 1000]], np.uint16)
    volume = one(tmp_path, stored << 4, BitsStored=12, HighBit=15)
    assert np.array_equal(volume.hu[0], stored.astype(int) - 1024)


def test_a_unit_other_than_hu_is_named(tmp_path):
    volume = one(tmp_path, STORED[0], RescaleType="US")
    assert volume.unit == "rescaled units (US)"
    assert not volume.is_hu
    assert codes(volume) == {"not-hu"}


def test_a_unit_that_is_free_text_is_not_repeated(tmp_path):
    assert one(tmp_path, STORED[0], RescaleType="Jane Doe").unit == "rescaled units (unnamed)"


def test_hu_said_outright_is_hu(tmp_path):
    assert one(tmp_path, STORED[0], RescaleType="HU").is_hu


def test_no_rescale_at_all_leaves_stored_values(tmp_path):
    volume = one(tmp_path, STORED[0], RescaleSlope=None, RescaleIntercept=None)
    assert volume.unit == "stored values"
    assert codes(volume) == {"not-hu"}
    assert np.array_equal(volume.hu[0], STORED[0])


@pytest.mark.parametrize("lost", [{"RescaleSlope": None}, {"RescaleSlope": "0"}])
def test_half_a_rescale_is_completed_and_said(tmp_path, lost):
    volume = one(tmp_path, STORED[0], **lost)
    assert volume.is_hu
    assert codes(volume) == {"hu-assumed"}
    assert np.array_equal(volume.hu[0], STORED[0] - 1024)


@pytest.mark.parametrize(
    "odd",
    [{"RescaleSlope": "1e308"}, {"RescaleSlope": "-1e-30"}, {"RescaleIntercept": "1e300"}],
    ids=str,
)
def test_an_impossible_rescale_is_refused(tmp_path, odd):
    """Its CT numbers would be infinite, or all one."""
    sw.save(sw.ct_slice(STORED[0], **odd), tmp_path / "one")
    (skipped,) = scan_folder(tmp_path).skipped
    assert skipped.reason == "the rescale slope or intercept is impossible"
    assert skipped.damaged


def test_acquisition_facts_come_slice_by_slice(tmp_path):
    sw.write_series(
        tmp_path,
        STORED,
        sw.line(4),
        Exposure=lambda k: str(100 + k),
        XRayTubeCurrent="300",
        ExposureTime="500",
        CTDIvol=lambda k: 7.5 + k,
        ReconstructionDiameter="4",
    )
    volume = read_series(tmp_path)
    assert [a.exposure_mas for a in volume.acquisition] == [100, 101, 102, 103]
    assert [a.ctdi_vol_mgy for a in volume.acquisition] == [7.5, 8.5, 9.5, 10.5]
    first = volume.acquisition[0]
    assert (first.kvp, first.kernel, first.tube_current_ma) == (120, "K40", 300)
    assert (first.exposure_time_ms, first.reconstruction_diameter_mm) == (500, 4)


def test_exposure_in_microampere_seconds_counts_as_mas(tmp_path):
    volume = one(tmp_path, STORED[0], Exposure=None, ExposureInuAs="12500")
    assert volume.acquisition[0].exposure_mas == 12.5


def test_windows_of_the_header_are_offered(tmp_path):
    volume = one(
        tmp_path,
        STORED[0],
        WindowCenter=["40", "-600"],
        WindowWidth=["400", "1500"],
        WindowCenterWidthExplanation=["SOFT", "LUNG"],
        VOILUTFunction="LINEAR_EXACT",
    )
    shown = [(w.centre, w.width, w.explanation, w.function) for w in volume.windows]
    assert shown == [
        (40, 400, "SOFT", "LINEAR_EXACT"),
        (-600, 1500, "LUNG", "LINEAR_EXACT"),
    ]


@pytest.mark.parametrize(
    ("width", "function", "kept"),
    [("0.5", "LINEAR", 0), ("0.5", "LINEAR_EXACT", 1), ("0", "SIGMOID", 0), ("9", "CURVE", 0)],
)
def test_windows_that_the_standard_forbids_are_not(tmp_path, width, function, kept):
    volume = one(tmp_path, STORED[0], WindowCenter="40", WindowWidth=width, VOILUTFunction=function)
    assert len(volume.windows) == kept
