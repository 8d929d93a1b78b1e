"""Coverage against closed forms, an independent library, and a slow obvious twin."""

from __future__ import annotations

import numpy as np
import pytest
from photutils.geometry import elliptical_overlap_grid
from skimage.draw import polygon2mask

from ct_measure_plugin.errors import ArgumentError, RegionError
from ct_measure_plugin.physics.coverage import Coverage, plane_coverage, slices_of
from ct_measure_plugin.physics.regions import (
    Box,
    Disc,
    Ellipse,
    Ellipsoid,
    Mask,
    Polygon,
    Segment,
)
from ct_measure_plugin.physics.volume import Volume

ROUNDING = 1e-12  # double precision, a few thousand additions


def whole(cover: Coverage, shape: tuple[int, int]) -> np.ndarray:
    image = np.zeros(shape)
    image[cover.rows, cover.columns] = cover.weights
    return image


@pytest.mark.parametrize("offset_mm", [0.0, 0.13, 0.5, 0.35])
@pytest.mark.parametrize("radius_mm", [0.2, 0.9, 9.3])
def test_disc_coverage_sums_to_the_disc_area(offset_mm, radius_mm):
    """Coverage is an area, so its sum must be pi r^2 to rounding, wherever the centre lies."""
    disc = Disc((20 + offset_mm, 21.0), radius_mm)
    cover = plane_coverage(disc, (64, 64), spacing_mm=(0.7, 0.7))
    assert cover.weights.sum() * 0.49 == pytest.approx(np.pi * radius_mm**2, rel=ROUNDING * 100)
    assert cover.outside == 0.0


def test_ellipses_agree_with_an_independent_exact_overlap():
    """photutils.geometry.elliptical_overlap_grid(use_exact=1), 200 random ellipses and circles."""
    rng = np.random.default_rng(20)
    for i in range(200):
        center, radii, angle = rng.uniform(20, 44, 2), rng.uniform(0.3, 15, 2), rng.uniform(0, 360)
        if i % 2:
            radii[1] = radii[0]
        mine = whole(
            plane_coverage(
                Ellipse(tuple(center), tuple(radii), angle), (64, 64), spacing_mm=(1, 1)
            ),
            (64, 64),
        )
        # its y axis points up the rows' index, so its angle turns the other way
        theirs = elliptical_overlap_grid(
            -0.5 - center[1], 63.5 - center[1], -0.5 - center[0], 63.5 - center[0],
            64, 64, radii[1], radii[0], np.radians(-angle), 1, 1,
        )  # fmt: skip
        np.testing.assert_allclose(mine, theirs, atol=1e-9, rtol=0)


def test_anisotropic_pixels_keep_the_area_in_millimetres():
    disc = Disc((11.03, 9.21), 5.4)
    cover = plane_coverage(disc, (40, 90), spacing_mm=(0.8, 0.3), origin_mm=(-2.0, -4.0))
    assert cover.weights.sum() * 0.24 == pytest.approx(disc.area_mm2, rel=1e-11)


def test_angles_turn_counter_clockwise_on_the_screen():
    """At 45 degrees the long axis points right and up, which is towards smaller rows."""
    cover = plane_coverage(Ellipse((20, 20), (2.0, 9.0), 45.0), (41, 41), spacing_mm=(1, 1))
    image = whole(cover, (41, 41))
    assert image[15, 25] == 1.0
    assert image[25, 25] == 0.0
    box = whole(
        plane_coverage(Box((20, 20), (2.0, 18.0), 45.0), (41, 41), spacing_mm=(1, 1)), (41, 41)
    )
    assert box[15, 25] == pytest.approx(1.0)
    assert box[25, 25] == 0.0


def random_polygon(rng: np.random.Generator) -> Polygon | None:
    """A star-shaped, usually concave polygon."""
    n = int(rng.integers(3, 12))
    turn = np.sort(rng.uniform(0, 2 * np.pi, n))
    if np.diff(np.r_[turn, turn[0] + 2 * np.pi]).max() > np.pi - 0.1:
        return None
    reach = rng.uniform(3, 28, n)
    points = np.c_[32 + reach * np.sin(turn), 32 + reach * np.cos(turn)]
    return Polygon(tuple((float(y), float(x)) for y, x in points))


def test_polygons_cover_their_shoelace_area():
    rng = np.random.default_rng(3)
    done = 0
    while done < 100:
        polygon = random_polygon(rng)
        if polygon is None:
            continue
        done += 1
        cover = plane_coverage(polygon, (64, 64), spacing_mm=(1, 1))
        assert cover.weights.sum() == pytest.approx(polygon.area_mm2, rel=1e-11)
        turned = Polygon(polygon.vertices_mm[::-1])
        again = plane_coverage(turned, (64, 64), spacing_mm=(1, 1))
        np.testing.assert_allclose(again.weights, cover.weights, atol=1e-12)


def test_polygons_agree_with_a_fine_raster():
    """A raster of 16 × 16 points a pixel errs by about a point's width along each border."""
    rng = np.random.default_rng(4)
    fine = 16
    done = 0
    while done < 12:
        polygon = random_polygon(rng)
        if polygon is None:
            continue
        done += 1
        points = (np.asarray(polygon.vertices_mm) + 0.5) * fine - 0.5
        raster = polygon2mask((64 * fine, 64 * fine), points)
        share = raster.reshape(64, fine, 64, fine).mean(axis=(1, 3))
        exact = whole(plane_coverage(polygon, (64, 64), spacing_mm=(1, 1)), (64, 64))
        # an edge crosses at most 2 × 16 of a pixel's 256 points; half of each may be misjudged
        assert np.abs(share - exact).max() < 2 * fine / 2 / fine**2 * 1.5
        assert np.abs(share - exact).mean() < 1e-3


@pytest.mark.parametrize(
    ("center", "count"), [((10.0, 10.0), 81), ((10.5, 10.5), 80)], ids=["pixel", "corner"]
)
def test_center_rule_counts_lattice_points(center, count):
    """Gauss's circle problem for r = 5: 81 points about a lattice point, 80 about a cell centre."""
    cover = plane_coverage(Disc(center, 5.0), (40, 40), spacing_mm=(1, 1), rule="center")
    assert cover.weights.sum() == count


def test_center_rule_takes_the_border_of_a_box_in():
    cover = plane_coverage(Box((5, 5), (4.0, 6.0)), (20, 20), spacing_mm=(1, 1), rule="center")
    assert cover.weights.sum() == 5 * 7


@pytest.mark.parametrize(
    "region",
    [
        Disc((0.0, 0.0), 10.0),
        Box((-0.5, 16.0), (20.0, 10.0)),
        Polygon(((-10.5, 10.0), (9.5, 10.0), (9.5, 20.0), (-10.5, 20.0))),
    ],
    ids=lambda region: region.kind,
)
def test_what_lies_outside_is_told(region):
    """The box and the polygon are halved by the image's border, the disc is cut by two of them."""
    cover = plane_coverage(region, (64, 64), spacing_mm=(1, 1))
    inside = {"disc": None, "box": 100.0, "polygon": 100.0}[region.kind]
    if inside is not None:
        assert cover.weights.sum() == pytest.approx(inside, rel=1e-12)
        assert cover.outside == pytest.approx(0.5)
    else:
        big = plane_coverage(region, (64, 64), spacing_mm=(1, 1), origin_mm=(-30, -30))
        kept = whole(big, (64, 64))[30:, 30:].sum()
        assert cover.weights.sum() == pytest.approx(kept, rel=1e-12)
        assert cover.outside == pytest.approx(1 - kept / region.area_mm2)


def test_a_region_far_away_covers_nothing():
    for region in (Disc((500.0, 500.0), 3.0), Box((-90.0, 5.0), (3.0, 3.0))):
        cover = plane_coverage(region, (64, 64), spacing_mm=(1, 1))
        assert not cover.weights.any()


def test_a_segment_with_width_is_a_box():
    cover = plane_coverage(Segment((10, 10), (10, 30), 4.0), (64, 64), spacing_mm=(1, 1))
    assert cover.weights.sum() == pytest.approx(80.0)
    with pytest.raises(RegionError, match="'width_mm' must be greater than 0"):
        plane_coverage(Segment((10, 10), (10, 30)), (64, 64), spacing_mm=(1, 1))


def test_a_mask_on_its_own_grid_is_itself():
    rng = np.random.default_rng(5)
    inside = rng.random((30, 40)) < 0.3
    cover = plane_coverage(
        Mask(inside, (1.0, 0.5, 0.7), (0.0, -3.0, 4.0)),
        (30, 40), spacing_mm=(0.5, 0.7), origin_mm=(-3.0, 4.0),
    )  # fmt: skip
    np.testing.assert_allclose(whole(cover, (30, 40)), inside, atol=1e-12)


def test_a_mask_on_another_grid_keeps_its_area():
    rng = np.random.default_rng(6)
    inside = np.zeros((30, 40), bool)
    inside[5:20, 8:31] = rng.random((15, 23)) < 0.5
    mask = Mask(inside, (1.0, 0.5, 0.7), (0.0, 3.0, 4.0))
    cover = plane_coverage(mask, (80, 90), spacing_mm=(0.33, 0.41))
    assert cover.weights.sum() * 0.33 * 0.41 == pytest.approx(mask.area_mm2, rel=1e-10)


def test_a_deep_mask_follows_the_slices():
    inside = np.zeros((3, 8, 8), bool)
    inside[1, 2:4, 2:4] = True
    mask = Mask(inside, (2.0, 1.0, 1.0), (10.0, 0.0, 0.0))
    volume = Volume(np.zeros((9, 8, 8)), (2.0, 1.0, 1.0), origin_mm=(4.0, 0.0, 0.0))
    assert slices_of(mask, volume) == [4]
    cover = plane_coverage(mask, (8, 8), spacing_mm=(1, 1), z_mm=12.0)
    assert cover.weights.sum() == 4


def test_slices_by_position_and_range():
    volume = Volume(np.zeros((5, 4, 4)), (2.0, 1.0, 1.0), origin_mm=(100.0, 0.0, 0.0))
    assert slices_of(Disc((1, 1), 1), volume) == [0, 1, 2, 3, 4]
    assert slices_of(Disc((1, 1), 1, z_mm=104.9), volume) == [2]
    assert slices_of(Disc((1, 1), 1, z_mm=(102.0, 106.0)), volume) == [1, 2, 3]
    assert slices_of(Disc((1, 1), 1, z_mm=50.0), volume) == []


def test_the_rule_must_be_known():
    with pytest.raises(ArgumentError, match="'rule' must be 'area' or 'center', got 'half'"):
        plane_coverage(Disc((1, 1), 1), (4, 4), spacing_mm=(1, 1), rule="half")


@pytest.mark.parametrize("z_mm", [40.0, 40.7, 41.0])
@pytest.mark.parametrize("dz", [0.5, 3.0, 20.0])
def test_slabs_side_by_side_hold_an_ellipsoids_volume(z_mm, dz):
    """4/3 π a b c to rounding, however coarse the slices: each holds its slab's mean section."""
    body = Ellipsoid((20.3, 21.0), (6.0, 9.0), 11.5, 33.0, z_mm=z_mm)
    volume = Volume(np.zeros((int(90 / dz), 48, 48)), (dz, 1.0, 1.0))
    total = 0.0
    for k in slices_of(body, volume):
        z = float(volume.positions_mm[k])
        cover = plane_coverage(body, (48, 48), spacing_mm=(1, 1), z_mm=z, slab_mm=dz)
        total += float(cover.weights.sum()) * dz
    assert total == pytest.approx(body.volume_mm3, rel=1e-10)


def test_the_center_rule_takes_the_lattice_points_of_a_ball():
    """Points of the cubic lattice within 5 of one of them: 515, by counting."""
    body = Ellipsoid((20.0, 20.0), (5.0, 5.0), 5.0, z_mm=10.0)
    volume = Volume(np.zeros((21, 41, 41)), (1.0, 1.0, 1.0))
    z, y, x = np.mgrid[-6:7, -6:7, -6:7]
    lattice = int(np.count_nonzero(z * z + y * y + x * x <= 25))
    found = sum(
        plane_coverage(
            body, (41, 41), spacing_mm=(1, 1), rule="center", z_mm=float(k), slab_mm=1.0
        ).weights.sum()
        for k in slices_of(body, volume, rule="center")
    )
    assert lattice == 515
    assert found == lattice


def test_a_deep_mask_keeps_its_volume_on_slices_of_another_thickness():
    rng = np.random.default_rng(7)
    inside = rng.random((9, 12, 12)) < 0.4
    mask = Mask(inside, (1.5, 1.0, 1.0), (7.3, 10.0, 11.0))
    volume = Volume(np.zeros((20, 40, 40)), (2.2, 1.0, 1.0))
    total = sum(
        plane_coverage(
            mask, (40, 40), spacing_mm=(1, 1), z_mm=float(volume.positions_mm[k]), slab_mm=2.2
        ).weights.sum()
        for k in slices_of(mask, volume)
    )
    assert total * 2.2 == pytest.approx(np.count_nonzero(inside) * 1.5, rel=1e-10)
