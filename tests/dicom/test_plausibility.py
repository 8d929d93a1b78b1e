"""CT numbers that cannot be right are doubted aloud; those that can are left alone."""

from __future__ import annotations

import numpy as np
import pytest
import series_writer as sw

from ct_measure_plugin.dicom import read_series

WATER = sw.noise((64, 64))


def doubt(tmp_path, stored, **changes):
    sw.save(sw.ct_slice(np.asarray(stored), **changes), tmp_path / "one")
    volume = read_series(tmp_path)
    return next((c.text for c in volume.cautions if c.code == "implausible-hu"), None)


def test_a_water_phantom_in_air_is_believed(tmp_path):
    assert doubt(tmp_path, WATER) is None


def test_a_missing_intercept_shifts_air_and_water_up(tmp_path):
    assert "1024 HU above" in doubt(tmp_path, WATER, RescaleIntercept="0")


def test_an_intercept_applied_twice_shifts_them_down(tmp_path):
    assert "1024 HU below" in doubt(tmp_path, WATER, RescaleIntercept="-2048")


def test_signed_pixels_read_as_unsigned_lie_far_out(tmp_path):
    stored = (WATER - 1024).view(np.uint16)
    assert "beyond ±20000 HU" in doubt(tmp_path, stored, RescaleIntercept="0")


@pytest.mark.parametrize("offset", [-32000, 32000 - 1100])
def test_values_near_the_ends_of_16_bits_lie_far_out(tmp_path, offset):
    stored = (WATER.astype(int) + offset).astype(np.int16)
    assert "beyond ±20000 HU" in doubt(tmp_path, stored, RescaleIntercept="0")


@pytest.mark.parametrize(
    "parts",
    [
        {"air": -1000},
        {"water": 0},
        {"bone": 1000, "muscle": 50, "air": -1000},
        {"air": -1000, "lung": -800, "water": 0},
        {"aluminium": 2000, "air": -1000},
    ],
    ids=str,
)
def test_objects_that_exist_are_believed(tmp_path, parts):
    rng = np.random.default_rng(2)
    stored = np.array(list(parts.values()))[rng.integers(len(parts), size=(64, 64))]
    stored = stored + rng.integers(-30, 31, stored.shape)
    assert doubt(tmp_path, stored.astype(np.int16), RescaleIntercept="0") is None


def test_values_cut_off_at_the_common_limits_narrow_the_range(tmp_path):
    """16 bit cells, but the scanner stopped at −1024 and 3071."""
    rng = np.random.default_rng(3)
    hu = np.clip(rng.normal(-1000, 60, (64, 64)), -1024, None).astype(np.int16)
    hu[20:30, 20:30] = 3071
    sw.save(sw.ct_slice(hu, RescaleIntercept="0"), tmp_path / "one")
    assert read_series(tmp_path).representable_hu == (-1024, 3071)


def test_values_that_only_touch_a_limit_do_not(tmp_path):
    hu = sw.noise((128, 128)) - 1024
    hu[0, 0] = 3071
    sw.save(sw.ct_slice(hu, RescaleIntercept="0"), tmp_path / "one")
    assert read_series(tmp_path).representable_hu == (-32768, 32767)
