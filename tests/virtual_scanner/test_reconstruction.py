"""Filtered backprojection: values, variance, an outside program, and the fan."""

from __future__ import annotations

import numpy as np
import pytest
from skimage.transform import iradon

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.virtual_scanner import (
    FanBeam,
    Grid,
    Kernel,
    ParallelBeam,
    Part,
    Phantom,
    SliceProfile,
    TabulatedMaterial,
    disc_rod,
    elliptic_cylinder,
    monoenergetic,
    reconstruct,
)
from ct_measure_plugin.virtual_scanner.projector import projection

EMPTY = TabulatedMaterial("empty", (1.0, 500.0), (0.0, 0.0))
BODY = TabulatedMaterial("body", (1.0, 500.0), (0.2, 0.2))  # 0.02 mm⁻¹
ROD = TabulatedMaterial("rod", (1.0, 500.0), (0.25, 0.25))


def _scan(geometry, *parts):
    return projection(geometry, Phantom(parts).cuts(SliceProfile(), 0.0), monoenergetic(70.0))


def _distance(grid, y, x):
    return np.hypot(grid.axis_mm(0)[:, None] - y, grid.axis_mm(1)[None] - x)


@pytest.mark.parametrize(
    ("shape", "theory"), [("ramp", 4.240e-7), ("hann", 6.027e-8)], ids=["ramp", "hann"]
)
def test_variance_of_white_projections(shape, theory):
    """M 360, d 0.5 mm, σ_p 0.01, linear lookup: (π d σ²/M) ∫ K² 2π df, folding included.

    Ramp without interpolation π²σ²/(12 M d²), times 0.464 by it; Hann 0.733. 3 %: eight images
    of some 2000 and 600 independent areas leave 1 and 2 % (1 σ).
    """
    beam = ParallelBeam(views=360, channels=400, pitch_mm=0.5)
    rng = np.random.default_rng(3)
    grid = Grid(matrix=128, fov_mm=64.0, lookup="linear")
    images = [
        reconstruct(rng.normal(0.0, 0.01, (360, 400)), beam, Kernel(shape, 1.0), grid)
        for _ in range(8)
    ]
    assert np.mean(np.square(images)) == pytest.approx(theory, rel=0.03)


def test_a_uniform_disc_off_centre_keeps_its_value_in_a_fan():
    """R 80 mm at (x 12.3, y −7.7), source at 500 mm: mean μ times 1.0000 (Kak and Slaney ch. 3).

    1e-4: the ramp's taps leave no offset; the rest is the ringing of the edge.
    """
    fan = FanBeam(views=720, channels=420, pitch_mm=0.5, source_mm=500.0)
    grid = Grid(matrix=128, fov_mm=200.0)
    image = reconstruct(
        _scan(fan, Part(disc_rod((-7.7, 12.3), 80.0), BODY, EMPTY)), fan, Kernel("hann", 1.0), grid
    )
    away = _distance(grid, -7.7, 12.3)
    assert float(image[away < 70].mean()) == pytest.approx(0.02, rel=1e-4)
    assert float(image[away < 70].std()) < 2e-5 * 0.02
    assert abs(float(image[away > 84].mean())) < 1e-4 * 0.02


def test_fan_and_parallel_beams_see_the_same_object():
    """Rods and body off the axis. 0.5 % of the body: the two rings of an edge differ a little."""
    parts = (
        Part(elliptic_cylinder((4.0, -6.0), (70.0, 45.0), angle_deg=20.0), BODY, EMPTY),
        Part(disc_rod((20.0, 25.0), 9.0), ROD, BODY),
    )
    grid = Grid(matrix=100, fov_mm=160.0)
    kernel = Kernel("hann", 0.5)
    parallel = ParallelBeam(views=720, channels=340, pitch_mm=0.5)
    fan = FanBeam(views=720, channels=340, pitch_mm=0.5, source_mm=400.0)
    first = reconstruct(_scan(parallel, *parts), parallel, kernel, grid)
    second = reconstruct(_scan(fan, *parts), fan, kernel, grid)
    assert float(np.abs(first - second).max()) < 0.005 * 0.02
    rod = _distance(grid, 20.0, 25.0) < 6
    assert float(second[rod].mean()) == pytest.approx(0.025, rel=1e-3)


def test_it_agrees_with_an_independent_reconstruction():
    """scikit-image's iradon on the same projections, with the same taps and lookup.

    It counts y upwards and puts the axis at pixel n // 2, which for an odd number of pixels is
    where ours is; it sets everything beyond the circle to 0. Inside it the two agree to 1e-5 of
    the largest value, which is the rounding of 360 sums in single precision.
    """
    pixels = 201
    beam = ParallelBeam(views=360, channels=pixels, pitch_mm=1.0)
    values = _scan(
        beam,
        Part(elliptic_cylinder((10.0, -15.0), (60.0, 40.0), angle_deg=25.0), BODY, EMPTY),
        Part(disc_rod((20.0, -25.0), 12.0), ROD, BODY),
    )
    grid = Grid(matrix=pixels, fov_mm=float(pixels), lookup="linear")
    ours = reconstruct(values, beam, Kernel("ramp", 0.5), grid)
    theirs = iradon(values.T, theta=np.degrees(beam.angles), filter_name="ramp")[::-1]
    circle = _distance(grid, 0.0, 0.0) < 99
    assert np.abs(ours - theirs)[circle].max() < 1e-5 * theirs.max()


@pytest.mark.parametrize("lookup", ["fine", "linear"])
@pytest.mark.parametrize("centre", [(0.0, 0.0), (3.2, -7.1)])
def test_an_object_lies_where_it_was_put(lookup, centre):
    """The centroid of a disc off the grid, on a grid off the axis: to 0.005 mm."""
    beam = ParallelBeam(views=180, channels=161, pitch_mm=0.5)
    grid = Grid(matrix=120, fov_mm=60.0, centre_mm=centre, lookup=lookup)
    image = reconstruct(
        _scan(beam, Part(disc_rod((-4.37, 6.61), 11.0), BODY, EMPTY)),
        beam,
        Kernel("hann", 1.0),
        grid,
    )
    image = np.where(_distance(grid, -4.37, 6.61) < 16, image, 0.0)
    y = float((image.sum(axis=1) * grid.axis_mm(0)).sum() / image.sum())
    x = float((image.sum(axis=0) * grid.axis_mm(1)).sum() / image.sum())
    assert (y, x) == pytest.approx((-4.37, 6.61), abs=0.005)


def test_the_picture_may_reach_beyond_the_detector():
    """Outside the circle the projections are 0 and the air reads 0, corners included."""
    beam = ParallelBeam(views=720, channels=81, pitch_mm=1.0)
    grid = Grid(matrix=100, fov_mm=160.0)
    image = reconstruct(
        _scan(beam, Part(disc_rod((0.0, 0.0), 35.0), BODY, EMPTY)), beam, Kernel("hann", 0.5), grid
    )
    outside = _distance(grid, 0.0, 0.0) > 41
    # 0.1 %: the streaks of 720 views
    assert float(np.abs(image[outside]).max()) < 1e-3 * 0.02


def test_threads_do_not_change_a_bit():
    beam = ParallelBeam(views=90, channels=120, pitch_mm=1.0)
    values = np.random.default_rng(0).normal(size=(90, 120))
    grid = Grid(matrix=150, fov_mm=100.0)
    alone = reconstruct(values, beam, Kernel("ramp", 0.5), grid, workers=1)
    np.testing.assert_array_equal(
        alone, reconstruct(values, beam, Kernel("ramp", 0.5), grid, workers=3)
    )


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: Grid(matrix=0), "'matrix' must be at least 1"),
        (lambda: Grid(fov_mm=0.0), "'fov_mm' must be greater than 0"),
        (lambda: Grid(lookup="cubic"), "'lookup' must be 'fine' or 'linear'"),
        (
            lambda: reconstruct(
                np.zeros((4, 8)),
                ParallelBeam(views=4, channels=8, pitch_mm=1.0),
                Kernel("hann", 0.6),
                Grid(matrix=4, fov_mm=4.0),
            ),
            "'cutoff_per_mm' must not exceed 0.5",
        ),
    ],
)
def test_misuse_is_named(make, words):
    with pytest.raises(ArgumentError, match=words):
        make()
