"""The noise map through the door of the measurements: regions, frame, refusals."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

import ct_measure_plugin as ctm
from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.results import Caution


def volume():
    noise = np.random.default_rng(1).normal(20, 10, (4, 96, 96)).astype(np.float32)
    noise[2:] *= 2
    return ctm.Volume(noise, (2.0, 0.6, 0.6), origin_mm=(5.0, -28.0, -30.0))


def test_regions_choose_slices_and_pixels():
    all_of_it = ctm.measure("noise_map", volume())
    assert all_of_it.noise_along_z.x.tolist() == [5, 7, 9, 11]
    assert all_of_it.noise_along_z.y[2:] == pytest.approx(
        2 * all_of_it.noise_along_z.y[:2], rel=0.1
    )
    assert all_of_it.sd_map.origin == (-28.0, -30.0)
    disc = ctm.regions.Disc((0.0, 0.0), 20.0, z_mm=(5.0, 7.0))
    found = ctm.measure("noise_map", volume(), disc)
    assert found.noise_sd.value == pytest.approx(10, rel=0.03)
    assert found.windows.value < all_of_it.windows.value / 2
    assert found.window.value == pytest.approx(6.6)


def test_misuse_and_refusals():
    with pytest.raises(ArgumentError, match="'window_px' must be odd"):
        ctm.measure("noise_map", volume(), window_px=10)
    lossy = replace(volume(), cautions=(Caution("lossy-compression", "Lossy."),))
    refused = ctm.measure("noise_map", lossy)
    assert "compressed with loss" in refused.reason
    away = ctm.regions.Disc((0.0, 0.0), 20.0, z_mm=(50.0, 60.0))
    assert not ctm.measure("noise_map", volume(), away)
    assert "windows" in ctm.measure("noise_map", volume(), low_hu=400.0, high_hu=500.0).reason
