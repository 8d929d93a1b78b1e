"""Line integrals of the plane figures, against closed forms and brute force."""

from __future__ import annotations

import math

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.virtual_scanner.sections import Blob, Ellipse, Polygon, box

ARROW = Polygon(((0.0, 0.0), (6.0, 4.0), (0.0, 8.0), (2.0, 4.0)))  # not convex
FIGURES = [
    Ellipse((3.0, -2.0), (8.0, 5.0), 33.0),
    Ellipse((-1.0, 4.0), (3.0, 3.0)),
    box((2.0, 1.0), (9.0, 4.0), 21.0),
    ARROW,
    Polygon(ARROW.corners_mm[::-1]),
    Blob((1.0, 2.0), 1.3),
]


def _ray(theta, t):
    return np.full_like(t, math.cos(theta)), np.full_like(t, math.sin(theta)), t


def test_ellipse_projection_closed_form():
    """Semi-axes 8 and 5, rotated 0.4 rad, view at 1.1 rad, t = 3: 10.42384 (Kak and Slaney ch. 3).

    Our angles run counter-clockwise on a screen with y down, the source's clockwise.
    """
    figure = Ellipse((0.0, 0.0), (8.0, 5.0), math.degrees(-0.4))
    found = figure.strip_mean(*_ray(1.1, np.array([3.0])), 0.0)
    assert float(found[0]) == pytest.approx(10.42384, abs=1e-5)  # its last printed digit


@pytest.mark.parametrize("figure", FIGURES[:-1], ids=lambda f: type(f).__name__)
@pytest.mark.parametrize("theta", [0.0, 0.3, math.pi / 2, 2.4, 3.9])
def test_chord_is_what_marching_along_the_ray_finds(figure, theta):
    """The slow twin: steps of 0.001 mm along the ray, counting those inside."""
    cy, cx = figure.centre_mm
    middle = cx * math.cos(theta) + cy * math.sin(theta)
    t = middle + np.array([-2.31, -0.4, 0.77, 1.9])
    u = np.linspace(-20.0, 20.0, 40_001)
    x = t[:, None] * math.cos(theta) - u * math.sin(theta)
    y = t[:, None] * math.sin(theta) + u * math.cos(theta)
    marched = figure.covers(y, x).sum(axis=1) * 1e-3
    found = figure.strip_mean(*_ray(theta, t), 0.0)
    # up to four ends of the chord may each be missed by half a step of 0.001 mm, and the chord
    # of a polygon is averaged over 1e-5 mm
    np.testing.assert_allclose(found, marched, atol=2.5e-3)


@pytest.mark.parametrize("figure", FIGURES, ids=lambda f: type(f).__name__)
@pytest.mark.parametrize("width", [0.05, 0.7])
def test_strip_mean_is_the_mean_of_the_chords(figure, width):
    cy, cx = figure.centre_mm
    theta = 0.83
    middle = cx * math.cos(theta) + cy * math.sin(theta)
    for t in middle + np.array([-1.7, 0.2, 2.9]):
        fine = t + width * ((np.arange(4000) + 0.5) / 4000 - 0.5)
        chords = figure.strip_mean(*_ray(theta, fine), 0.0)
        found = figure.strip_mean(*_ray(theta, np.array([t])), width)
        # the midpoint rule on a square-root end errs by about (width/4000)^1.5
        assert float(found[0]) == pytest.approx(chords.mean(), abs=2e-5)


@pytest.mark.parametrize(
    ("figure", "area"),
    [
        (FIGURES[0], math.pi * 40.0),
        (FIGURES[1], math.pi * 9.0),
        (FIGURES[2], 36.0),
        (FIGURES[3], 16.0),
        (FIGURES[4], 16.0),
        (FIGURES[5], 2 * math.pi * 1.69),
    ],
)
def test_every_view_sees_the_whole_area(figure, area):
    """The strips of one view tile the figure, so they sum to its area, to rounding."""
    t = np.arange(-40, 40) * 0.5
    for theta in (0.0, 0.9, math.pi / 2, 2.0):
        total = figure.strip_mean(*_ray(theta, t), 0.5).sum() * 0.5
        assert float(total) == pytest.approx(area, rel=1e-9)


def test_a_mound_has_a_gaussian_shadow():
    """s √(2π) exp(−t²/2s²), the line integral of a Gaussian."""
    t = np.array([0.0, 1.0, 2.6])
    found = Blob((0.0, 0.0), 1.3).strip_mean(*_ray(0.4, t), 0.0)
    expected = 1.3 * math.sqrt(2 * math.pi) * np.exp(-0.5 * (t / 1.3) ** 2)
    np.testing.assert_allclose(found, expected, rtol=1e-12)


def test_arrow_area_is_the_shoelace_sum():
    y, x = np.array(ARROW.corners_mm).T
    assert 0.5 * abs(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y)) == pytest.approx(16.0)


def test_angles_run_counter_clockwise_on_the_screen():
    """A long box at 30° reaches up and to the right: y is negative where x is positive."""
    long = box((0.0, 0.0), (20.0, 2.0), 30.0)
    tilted = Ellipse((0.0, 0.0), (10.0, 1.0), 30.0)
    up_right = np.array(-8.0 * math.sin(math.radians(30))), np.array(8.0 * math.cos(math.pi / 6))
    for figure in (long, tilted):
        assert bool(figure.covers(*up_right))
        assert not bool(figure.covers(-up_right[0], up_right[1]))


@pytest.mark.parametrize("figure", FIGURES, ids=lambda f: type(f).__name__)
def test_moving_a_figure_moves_its_shadow(figure):
    theta, t = 0.6, np.linspace(-9.0, 9.0, 37)
    shift = 1.5 * math.cos(theta) - 0.7 * math.sin(theta)
    moved = figure.moved(-0.7, 1.5).strip_mean(*_ray(theta, t + shift), 0.4)
    # 1e-9 of 1 mm: strip means are differences of areas of about 100 mm²
    np.testing.assert_allclose(moved, figure.strip_mean(*_ray(theta, t), 0.4), atol=1e-9)


@pytest.mark.parametrize("figure", FIGURES, ids=lambda f: type(f).__name__)
def test_nothing_is_seen_beyond_the_reach(figure):
    cy, cx = figure.centre_mm
    for theta in np.linspace(0.0, math.pi, 7):
        middle = cx * math.cos(theta) + cy * math.sin(theta)
        t = middle + np.array([-1.0, 1.0]) * (figure.reach_mm + 0.26)
        assert np.all(np.abs(figure.strip_mean(*_ray(theta, t), 0.5)) < 1e-12)


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: Ellipse((0, 0), (1.0, 0.0)), "'semi_axes_mm' must each be greater than 0"),
        (lambda: Polygon(((0, 0), (1, 1))), "'corners_mm' must hold at least 3"),
        (lambda: Polygon(((0, 0), (1, 1), (2, 2))), "'corners_mm' must hold at least 3"),
        (lambda: Blob((0, 0), -1.0), "'sigma_mm' must be greater than 0, got -1.0"),
        (lambda: box((0, 0), (1.0, -1.0)), "'size_mm' must each be greater than 0"),
    ],
)
def test_misuse_is_named(make, words):
    with pytest.raises(ArgumentError, match=words):
        make()
