"""Paths: strips against closed forms, profiles against scikit-image's, piece by piece."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.special import ndtr
from skimage.measure import profile_line

from ct_measure_plugin.errors import RegionError
from ct_measure_plugin.physics.coverage import plane_coverage
from ct_measure_plugin.physics.line_profile import line_profile
from ct_measure_plugin.physics.path_pieces import pieces_of
from ct_measure_plugin.physics.profile_samples import path_points, sample
from ct_measure_plugin.physics.regions import Path
from ct_measure_plugin.physics.results import NotMeasured

#: Pieces of 20, 15 and 25 pixels along the sides of triangles of 3, 4 and 5: whole pixels along.
CORNERS = [(8.0, 6.0), (20.0, 22.0), (32.0, 13.0), (39.0, 37.0)]
LENGTHS = (20, 15, 25)


@pytest.fixture(scope="module")
def noisy():
    return np.random.default_rng(4).normal(0, 50, (44, 40))


@pytest.mark.parametrize("order", [1, 3])
@pytest.mark.parametrize("lines", [1, 3])
def test_each_piece_reads_what_scikit_image_reads(noisy, order, lines):
    """skimage.measure.profile_line a piece at a time, same places, where the strips are clear."""
    path = path_points(np.asarray(CORNERS), step=1.0, width=lines - 1.0, line_step=1.0)
    values, inside = sample(noisy[None], path.place, (1.0, 1.0), order)
    assert inside.all()
    assert path.distance[-1] == sum(LENGTHS)
    first = 0
    for start, end, length in zip(CORNERS, CORNERS[1:], LENGTHS, strict=False):
        outside = profile_line(
            noisy, start, end, linewidth=lines, order=order, mode="reflect", reduce_func=None
        ).reshape(length + 1, lines)
        # a corner's own point lies on the piece that begins there
        ours = values[0, :, first : first + length].T
        mine = path.own[:, first : first + length].T
        same = np.isclose(np.sort(ours, axis=1), np.sort(outside[:length], axis=1), atol=1e-9)
        assert same.all()
        assert mine[lines:-lines].all()
        first += length


def test_what_lies_beside_a_corner_counts_for_one_piece():
    """Values 1 and 2 on either side of the line that halves the corner: none is mixed in."""
    y, x = np.mgrid[:60, :60].astype(float)
    corners = [(2.5, 30.25), (30.25, 30.25), (30.25, 2.5)]
    # the path comes from above and goes to the left
    halves = np.where((30.25 - y) > (30.25 - x), 1.0, 2.0)
    found = line_profile(halves, corners, spacing_mm=(1, 1), width_mm=12.0, order=0)
    before = found.profile.x < 27.75 - 1.0
    after = found.profile.x > 27.75 + 1.0
    # one line of eight may take the nearest pixel's value from over the border
    assert np.abs(found.profile.y[before] - 1.0).max() < 0.15
    assert np.abs(found.profile.y[after] - 2.0).max() < 0.15
    path = path_points(np.asarray(corners), step=0.1, width=12.0, line_step=0.5)
    values, _ = sample(halves[None], path.place, (1.0, 1.0), 0)
    assert values.mean(axis=(0, 1))[path.distance < 27.75 - 1.0].max() > 1.3  # all lines mix them


def test_beside_a_corner_fewer_lines_count_and_the_noise_says_so(noisy):
    found = line_profile(noisy, [(6, 8), (6, 32), (30, 32)], spacing_mm=(1, 1), width_mm=8.0)
    doubt = found.profile.y_uncertainty
    far = np.abs(found.profile.x - 24) > 5
    assert np.ptp(doubt[far]) == 0
    corner = int(np.argmin(np.abs(found.profile.x - 24)))
    assert doubt[corner] == pytest.approx(doubt[0] * math.sqrt(17 / 9), rel=0.06)  # half, and one


@pytest.mark.parametrize("width", [0.5, 3.0, 7.0])
def test_a_strips_area_is_its_closed_form(width):
    """Length times width, less the overlap h² tan of each corner, plus its wedge h² sin / 2."""
    path = Path(tuple(CORNERS), width)
    turns = 2 * np.arctan(np.abs(pieces_of(np.asarray(CORNERS)).lean[1:-1]))
    half = width / 2
    area = sum(LENGTHS) * width - half**2 * np.sum(np.tan(turns / 2) - np.sin(turns) / 2)
    assert path.length_mm == sum(LENGTHS)
    assert path.strip().area_mm2 == pytest.approx(area, rel=1e-12)
    cover = plane_coverage(path, (100, 90), spacing_mm=(0.5, 0.7), origin_mm=(-3.0, -4.0))
    assert cover.weights.sum() * 0.35 == pytest.approx(area, rel=1e-12)


def test_a_straight_path_is_the_segments_strip():
    path = Path(((4, 4), (10, 12), (16, 20)), 3.0)
    assert path.strip().area_mm2 == pytest.approx(20 * 3.0)


@pytest.mark.parametrize(
    ("path", "words"),
    [
        (Path(((0, 0), (0, 9))), "'width_mm' must be greater than 0 to enclose pixels"),
        (Path(((0, 0), (0, 9), (2, 9)), 5.0), "must be at most 4 mm where the path turns"),
        (Path(((0, 0), (0, 9), (0, 2)), 0.1), "where the path turns so sharply"),
        (Path(((0, 0), (0, 9), (9, 9), (9, 3), (-9, 3)), 1.0), "must stay clear of itself"),
    ],
    ids=["no-width", "sharp", "back", "crossing"],
)
def test_a_strip_that_is_none_says_why(path, words):
    with pytest.raises(RegionError, match=words):
        path.strip()


@pytest.mark.parametrize(
    ("given", "words"),
    [
        ({"vertices_mm": ((0, 0),)}, "at least 2 corners"),
        ({"vertices_mm": ((0, 0), (0, 0), (1, 1))}, "each differ from the next"),
        ({"vertices_mm": ((0, 0), (0, math.nan))}, "must be finite"),
        ({"vertices_mm": ((0, 0), (1, 1)), "width_mm": -1.0}, "must not be negative"),
    ],
    ids=["one", "twice", "nan", "width"],
)
def test_a_path_that_breaks_its_rules_is_refused(given, words):
    with pytest.raises(RegionError, match=words):
        Path(**given)


def edge_at(x0):
    x = np.arange(160) * 0.25
    return np.tile(100 * ndtr((x - x0) / 0.8), (120, 1))


def test_an_edge_across_one_piece_of_a_path_has_its_closed_form():
    """10-90 % of a Gaussian edge is 2.563103 sigma, its place the arc length up to it."""
    path = [(20.0, 6.0), (20.0, 32.0), (6.0, 32.0)]
    found = line_profile(edge_at(22.0), path, spacing_mm=(0.25, 0.25), width_mm=2.0)
    assert found.edge_width.value == pytest.approx(2.563103 * 0.8, rel=3e-3)
    assert found.middle.value == pytest.approx(16.0, abs=2e-3)
    assert found.length.value == pytest.approx(26 + 14)
    assert "turn-within-width" not in {c.code for c in found.cautions}


def test_a_turn_within_the_edge_is_cautioned():
    path = [(20.0, 6.0), (20.0, 22.5), (10.0, 36.0)]
    found = line_profile(edge_at(22.0), path, spacing_mm=(0.25, 0.25), width_mm=2.0)
    assert found.edge_width
    assert "turn-within-width" in {c.code for c in found.cautions}


def test_a_turn_beyond_a_wide_peak_is_none_within_it():
    """A plateau from 12 to 22 mm: its middle is 17, and a corner at 28 lies beyond its flank."""
    x = np.arange(160) * 0.25
    ridge = np.tile(100 * (ndtr((x - 12) / 0.5) - ndtr((x - 22) / 0.5)), (120, 1))
    for corner, turns in ((28.0, False), (21.8, True)):
        path = [(20.0, 4.0), (20.0, corner), (16.0, 38.0)]
        found = line_profile(ridge, path, spacing_mm=(0.25, 0.25))
        assert found.fwhm.value == pytest.approx(10.0, abs=0.1)
        assert ("turn-within-width" in {c.code for c in found.cautions}) == turns


def test_a_path_that_turns_too_sharply_for_its_width_is_refused(noisy):
    zigzag = [(10, 5), (10, 15), (14, 15), (14, 30)]
    assert line_profile(noisy, zigzag, spacing_mm=(1, 1), width_mm=2.0)
    refused = line_profile(noisy, zigzag, spacing_mm=(1, 1), width_mm=12.0)
    assert isinstance(refused, NotMeasured)
    assert "turns too sharply for a width of 12 mm" in refused.reason
    back = line_profile(noisy, [(10, 5), (10, 30), (10, 5)], spacing_mm=(1, 1))
    assert back.length.value == pytest.approx(50)
    np.testing.assert_allclose(back.profile.y, back.profile.y[::-1], atol=1e-9)
