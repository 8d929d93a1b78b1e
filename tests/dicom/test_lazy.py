"""A series larger than memory opens as a dask array and decodes only the slices touched."""

from __future__ import annotations

import dask.array
import numpy as np
import pytest
import series_writer as sw
from pydicom.uid import RLELossless

from ct_measure_plugin.dicom import lazy, loading, pixels, read, read_series

STORED = sw.noise((7, 16, 16))


@pytest.fixture
def decoded(monkeypatch):
    """Return the places along the normal of the slices that were decoded."""
    seen: list[float] = []

    def counting(image, target):
        seen.append(image.position[2])
        return pixels.stored_into(image, target)

    monkeypatch.setattr(lazy, "stored_into", counting)
    monkeypatch.setattr(loading, "stored_into", counting)
    return seen


def write(tmp_path, **changes):
    return sw.write_series(tmp_path, STORED, sw.line(7), BitsStored=12, HighBit=11, **changes)


def test_opening_decodes_nothing_and_touching_decodes_what_is_touched(tmp_path, decoded):
    volume = read_series(write(tmp_path), lazy=True)
    assert isinstance(volume.hu, dask.array.Array)
    assert volume.hu.chunks == ((1,) * 7, (16,), (16,))
    assert decoded == []
    assert np.array_equal(volume.plane(3), STORED[3] - 1024)
    assert decoded == [6.0]
    part = np.asarray(volume.hu[5:7, 2:4, 1:9])
    assert np.array_equal(part, STORED[5:7, 2:4, 1:9] - 1024)
    assert sorted(decoded) == [6.0, 10.0, 12.0]


@pytest.mark.parametrize(
    "key",
    [
        np.s_[3],
        np.s_[-1, 2],
        np.s_[:, 4, 5],
        np.s_[::2, ::-3, 1:9],
        np.s_[5:5],
        np.s_[:, 2:2],
        np.s_[[4, 1], 3],
        np.s_[..., None, 7],
    ],
    ids=str,
)
def test_every_way_to_index_gives_what_the_loaded_array_gives(tmp_path, key):
    folder = write(tmp_path)
    late, now = read_series(folder, lazy=True).hu[key], read_series(folder, lazy=False).hu[key]
    assert late.shape == now.shape
    assert np.array_equal(np.asarray(late), now)


@pytest.mark.parametrize(
    "changes",
    [{}, {"RescaleSlope": "0.5"}, {"RescaleSlope": lambda k: str(k + 1)}],
    ids=["whole", "halves", "a slope a slice"],
)
def test_lazy_and_loaded_values_are_the_same(tmp_path, changes):
    folder = write(tmp_path, **changes)
    late, now = read_series(folder, lazy=True), read_series(folder, lazy=False)
    assert np.array_equal(np.asarray(late.hu), now.hu)
    assert late.spacing_mm == now.spacing_mm
    assert np.array_equal(late.affine_lps, now.affine_lps)
    assert late.hu.dtype == now.hu.dtype


def test_values_that_could_leave_int16_are_float_when_lazy(tmp_path):
    """16 bit unsigned cells may hold more than int16 does after rescale; nobody has looked yet."""
    sw.write_series(tmp_path, STORED.view(np.uint16), sw.line(7))
    assert read_series(tmp_path, lazy=True).hu.dtype == np.float32
    assert read_series(tmp_path, lazy=False).hu.dtype == np.int16


def test_compressed_slices_are_lazy_too(tmp_path, decoded):
    for k in range(7):
        ds = sw.ct_slice(STORED[k], position=(0, 0, 2 * k))
        sw.save_compressed(ds, tmp_path / str(k), RLELossless)
    volume = read_series(tmp_path, lazy=True)
    assert np.array_equal(volume.plane(2), STORED[2] - 1024)
    assert decoded == [4.0]


def test_a_series_larger_than_the_limit_is_lazy_by_itself(tmp_path, monkeypatch):
    folder = write(tmp_path)
    size = STORED.size * 2
    monkeypatch.setattr(read, "_memory_limit", lambda: size)
    assert isinstance(read_series(folder).hu, np.ndarray)
    monkeypatch.setattr(read, "_memory_limit", lambda: size - 1)
    assert isinstance(read_series(folder).hu, dask.array.Array)


def test_the_memory_limit_is_that_of_a_machine():
    assert 1 << 28 < read._memory_limit() < 1 << 48


def test_impossible_values_are_masked_unseen(tmp_path):
    stored = STORED - np.int16(1024)
    stored[:, :3, :3] = -2000
    folder = sw.write_series(tmp_path, stored, sw.line(7), RescaleIntercept="0")
    late = read_series(folder, lazy=True)
    assert np.array_equal(late.padding(4), stored[4] == -2000)
