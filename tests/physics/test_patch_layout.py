"""Patches laid out in a region: all inside, apart as asked, as many as fit."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.coverage import plane_coverage
from ct_measure_plugin.physics.patch_layout import lay_patches
from ct_measure_plugin.physics.regions import Box, Disc, Polygon

SHAPE, SPACING = (200, 240), (0.5, 0.5)


def inside(region, corners, size):
    cover = plane_coverage(region, SHAPE, spacing_mm=SPACING, rule="center")
    full = np.zeros(SHAPE)
    full[cover.rows, cover.columns] = cover.weights
    return all(full[y : y + size, x : x + size].all() for y, x in corners)


def laid(region, **settings):
    cover = plane_coverage(region, SHAPE, spacing_mm=SPACING, rule="center")
    return lay_patches(cover, spacing_mm=SPACING, **settings)


@pytest.mark.parametrize(
    "region",
    [
        Disc((50.0, 60.0), 45.0),
        Box((50.0, 60.0), (70.0, 50.0), 20.0),
        Polygon(((5.0, 5.0), (95.0, 10.0), (60.0, 50.0), (90.0, 110.0))),
    ],
    ids=lambda r: r.kind,
)
@pytest.mark.parametrize("overlap", [0.0, 0.5])
@pytest.mark.parametrize("layout", ["grid", "ring"])
def test_every_patch_lies_inside_and_no_two_are_closer_than_asked(region, overlap, layout):
    corners = laid(region, size_px=16, overlap=overlap, layout=layout)
    assert len(corners) >= 3
    assert inside(region, corners, 16)
    apart = np.abs(corners[:, None] - corners[None]).max(axis=2)
    np.fill_diagonal(apart, 999)
    assert apart.min() >= 16 * (1 - overlap)


def test_a_grid_holds_what_the_best_shift_holds():
    """Against all shifts tried one by one."""
    region = Disc((50.3, 60.1), 31.0)
    cover = plane_coverage(region, SHAPE, spacing_mm=SPACING, rule="center")
    full = np.zeros(SHAPE)
    full[cover.rows, cover.columns] = cover.weights
    most = max(
        sum(
            full[y : y + 20, x : x + 20].all()
            for y in range(oy, SHAPE[0] - 19, 20)
            for x in range(ox, SHAPE[1] - 19, 20)
        )
        for oy in range(20)
        for ox in range(20)
    )
    assert len(laid(region, size_px=20)) == most


def test_a_ring_keeps_its_radius_and_its_spread():
    corners = laid(Disc((50.0, 60.0), 45.0), size_px=16, layout="ring", radius_mm=30.0)
    middles = corners + 7.5 - (100, 120)
    assert np.hypot(*middles.T) == pytest.approx(60, abs=0.8)  # whole pixels: at most 1/√2
    angles = np.sort(np.arctan2(middles[:, 0], middles[:, 1]))
    gaps = np.diff(np.append(angles, angles[0] + 2 * np.pi))
    assert gaps.max() < 1.1 * gaps.min()
    assert len(corners) >= 14  # 2π 60 / 16 = 23; square patches need up to √2 of their side


def test_nothing_fits_into_too_small_a_region():
    assert laid(Disc((50.0, 60.0), 5.0), size_px=32).shape == (0, 2)
    assert laid(Disc((50.0, 60.0), 8.0), size_px=32).shape == (0, 2)


def test_misuse_names_the_argument():
    with pytest.raises(ArgumentError, match="'overlap' must lie within"):
        laid(Disc((50.0, 60.0), 45.0), overlap=1.0)
    with pytest.raises(ArgumentError, match="'layout' must be one of"):
        laid(Disc((50.0, 60.0), 45.0), layout="spiral")
    with pytest.raises(ArgumentError, match="'size_px' must be at least 2"):
        laid(Disc((50.0, 60.0), 45.0), size_px=1)
