"""Line profiles against scikit-image's, and widths against closed forms."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import ndtr
from skimage.measure import profile_line

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.line_profile import line_profile
from ct_measure_plugin.physics.profile_samples import path_points, sample
from ct_measure_plugin.physics.results import NotMeasured


@pytest.fixture(scope="module")
def noisy():
    return np.random.default_rng(2).normal(0, 50, (40, 60))


@pytest.mark.parametrize("order", [0, 1, 3])
@pytest.mark.parametrize(
    ("start", "end"), [((5, 6), (30, 50)), ((33.2, 4.1), (6.4, 21.7)), ((8, 50), (8, 5))]
)
def test_values_are_those_of_scikit_image(noisy, order, start, end):
    """skimage.measure.profile_line: same places, a pixel apart, on one line and on three."""
    length = np.hypot(end[0] - start[0], end[1] - start[1])
    whole = int(np.ceil(length + 1))
    for lines in (1, 3):
        outside = profile_line(
            noisy, start, end, linewidth=lines, order=order, mode="reflect", reduce_func=None
        ).reshape(whole, lines)
        path = path_points(
            np.array([start, end], float),
            step=length / (whole - 1),
            width=lines - 1.0,
            line_step=1.0,
        )
        assert path.place.shape == (lines, whole, 2)
        values, inside = sample(noisy[None], path.place, (1.0, 1.0), order)
        assert inside.all()
        if order == 0:  # a place half-way between two pixels may round either way
            same = np.isclose(np.sort(values[0].T, axis=1), np.sort(outside, axis=1))
            assert same.mean() > 0.97
        else:
            np.testing.assert_allclose(
                np.sort(values[0].T, axis=1), np.sort(outside, axis=1), atol=1e-9
            )


def test_distances_are_millimetres_whatever_the_pixels():
    """A plane 3 y + 2 x in mm is read exactly along any path, cubic and linear."""
    y, x = np.mgrid[:50, :80]
    image = 3 * y * 0.8 + 2 * x * 0.3
    points = [(4.0, 3.0), (30.0, 20.0), (10.0, 14.0)]
    for order in (1, 3):
        found = line_profile(image, points, spacing_mm=(0.8, 0.3), order=order)
        total = np.hypot(26, 17) + np.hypot(20, 6)
        assert found.length.value == pytest.approx(total)
        first = found.profile.x <= np.hypot(26, 17)
        along = found.profile.x[first] / np.hypot(26, 17)
        expected = 3 * (4 + 26 * along) + 2 * (3 + 17 * along)
        np.testing.assert_allclose(found.profile.y[first], expected, atol=2e-3)
        assert np.diff(found.profile.x).max() <= 0.3 / 10 + 1e-12


def edge(angle, pixel, sigma=1.0, n=160):
    y, x = (np.mgrid[:n, :n] - (n - 1) / 2) * pixel
    turn = np.radians(angle)
    return 100 * ndtr((np.cos(turn) * x + np.sin(turn) * y) / sigma)


def across(angle, pixel, length, n=160):
    """Ends of a line through the middle along the edge's normal."""
    middle = (n - 1) / 2 * pixel
    turn = np.radians(angle)
    step = length / 2 * np.array([np.sin(turn), np.cos(turn)])
    return [tuple(middle - step), tuple(middle + step)]


@pytest.mark.parametrize("angle", [0, 12, 33, 45])
def test_the_width_of_a_gaussian_edge_is_its_closed_form(angle):
    """10-90 % is 2.563103 sigma, cubic interpolation on pixels of 0.25 sigma."""
    found = line_profile(edge(angle, 0.25), across(angle, 0.25, 20), spacing_mm=(0.25, 0.25))
    assert found.edge_width.value == pytest.approx(2.563103, rel=2e-3)
    assert found.middle.value == pytest.approx(10.0, abs=1e-3)
    assert found.step.value == pytest.approx(100, rel=1e-3)
    np.testing.assert_allclose(found.crossings.y, [10.0], atol=1e-3)
    assert found.level.value == pytest.approx(50, abs=0.01)
    assert isinstance(found.fwhm, NotMeasured)


@pytest.mark.parametrize(
    ("pixel", "sigma", "percent"), [(0.25, 1.0, 0.5), (0.5, 1.0, 2.1), (0.5, 0.6, 5.5)]
)
def test_linear_interpolation_blurs_by_what_the_page_says(pixel, sigma, percent):
    """An independent calculation gave 0.5, 2.1 and 5.5 % at 33°; cubic at most 0.14 %."""
    image, line = edge(33, pixel, sigma), across(33, pixel, 20 * sigma)
    truth = 2.563103 * sigma
    linear = line_profile(image, line, spacing_mm=(pixel, pixel), order=1)
    assert 100 * (linear.edge_width.value / truth - 1) == pytest.approx(percent, abs=0.4)
    assert "resampled-profile" in {c.code for c in linear.cautions}
    cubic = line_profile(image, line, spacing_mm=(pixel, pixel))
    assert abs(cubic.edge_width.value / truth - 1) < 0.003
    assert "resampled-profile" not in {c.code for c in cubic.cautions}


@pytest.mark.parametrize("height", [300.0, -300.0])
def test_the_width_of_a_gaussian_peak_is_its_closed_form(height):
    """FWHM 2.354820 sigma; the parabola through the top 15 % reads 0.1 % high."""
    y, x = (np.mgrid[:100, :100] - 49.5) * 0.25
    image = 20 + height * np.exp(-0.5 * (0.8 * x + 0.6 * y) ** 2)
    middle = 49.5 * 0.25
    line = [(middle - 5.4, middle - 7.2), (middle + 5.4, middle + 7.2)]
    found = line_profile(image, line, spacing_mm=(0.25, 0.25))
    assert found.fwhm.value == pytest.approx(2.354820, rel=3e-3)
    assert found.height.value == pytest.approx(height, rel=3e-3)
    assert found.middle.value == pytest.approx(9.0, abs=1e-3)
    assert isinstance(found.edge_width, NotMeasured)
    assert len(found.crossings.y) == 2


def test_all_crossings_of_a_given_level_are_listed():
    x = np.tile(np.sin(np.arange(400) * np.pi / 50), (9, 1))
    found = line_profile(x, [(4, 10), (4, 389)], spacing_mm=(1.0, 1.0), level=0.0)
    np.testing.assert_allclose(found.crossings.y, 50 * np.arange(1, 8) - 10, atol=1e-3)


def test_averaging_over_width_and_slices_lowers_the_noise():
    rng = np.random.default_rng(6)
    stack = rng.normal(0, 20, (4, 60, 200))
    line = [(30.0, 20.0), (30.0, 180.0)]
    one = line_profile(stack[0], line, spacing_mm=(1, 1), step_mm=1.0)
    many = line_profile(stack, line, spacing_mm=(1, 1), step_mm=1.0, width_mm=8.0)
    assert one.sd is None
    assert one.noise.value == pytest.approx(20, rel=0.25)  # 40 points at each end: 11 %
    # 17 lines half a pixel apart over 8 mm see 8 to 9 independent pixels
    assert many.noise.value == pytest.approx(20 / np.sqrt(4 * 8.5), rel=0.3)
    # cubic interpolation half-way between pixels lowers white noise somewhat
    assert 14 < np.median(many.sd.y) < 21


def trial(make, name, count=150):
    rng = np.random.default_rng(9)
    rows = []
    for _ in range(count):
        found = line_profile(**make(rng))
        rows.append((getattr(found, name).value, getattr(found, name).uncertainty))
    value, doubt = np.array(rows).T
    return value, doubt


@pytest.mark.parametrize("name", ["edge_width", "middle", "step"])
def test_an_edges_stated_uncertainty_is_the_scatter(name):
    """150 repeats fix a scatter to 6 %. The profile's own ends tell their noise from some twenty
    independent points, so that single statements scatter by 15 %; the median is tested."""
    clean = edge(20, 0.5, 1.2, 80)
    line = across(20, 0.5, 24, 80)

    def make(rng):
        return {
            "image": clean + rng.normal(0, 4, clean.shape),
            "points_mm": line,
            "spacing_mm": (0.5, 0.5),
            "width_mm": 3.0,
        }

    value, doubt = trial(make, name)
    truth = {"edge_width": 2.563103 * 1.2, "middle": 12.0, "step": 100.0}[name]
    assert 0.75 < np.median(doubt) / value.std() < 1.35
    assert abs(value.mean() - truth) < 4 * value.std() / np.sqrt(150) + 0.01 * truth
    assert 0.88 < np.mean(np.abs(value - truth) < 1.96 * doubt) <= 1.0


@pytest.mark.parametrize("name", ["fwhm", "height", "middle"])
def test_a_peaks_stated_uncertainty_is_the_scatter(name):
    y, x = (np.mgrid[:60, :60] - 29.5) * 0.5
    clean = 100 * np.exp(-0.5 * (x / 1.3) ** 2) + 0 * y

    def make(rng):
        return {
            "image": clean + rng.normal(0, 5, clean.shape),
            "points_mm": [(14.75, 2.0), (14.75, 27.5)],
            "spacing_mm": (0.5, 0.5),
            "width_mm": 2.0,
        }

    value, doubt = trial(make, name)
    truth = {"fwhm": 2.354820 * 1.3, "height": 100.0, "middle": 12.75}[name]
    assert 0.7 < np.median(doubt) / value.std() < 1.5
    assert 0.88 < np.mean(np.abs(value - truth) < 1.96 * doubt) <= 1.0


def test_averaging_across_a_slanted_edge_is_cautioned():
    """Width 12 mm at 8° shifts by 1.7 mm: the width grows by 1.7² / 24 = 12 % of sigma 1."""
    image = edge(8, 0.25)
    line = across(0, 0.25, 24)
    found = line_profile(image, line, spacing_mm=(0.25, 0.25), width_mm=12.0)
    (text,) = [c.text for c in found.cautions if c.code == "slanted-average"]
    assert "8.0°" in text
    straight = line_profile(image, across(8, 0.25, 24), spacing_mm=(0.25, 0.25), width_mm=12.0)
    assert "slanted-average" not in {c.code for c in straight.cautions}
    assert found.edge_width.value > 1.08 * straight.edge_width.value


def test_a_straight_ridge_does_not_lean_though_it_has_two_flanks():
    """Its middle lies as far from either flank; noise must not choose between them by line."""
    x = np.arange(120) * 0.25
    ridge = 300 * (ndtr((x - 12) / 0.4) - ndtr((x - 18) / 0.4))
    image = np.tile(ridge, (40, 1)) + np.random.default_rng(3).normal(0, 10, (40, 120))
    found = line_profile(image, [(5, 2), (5, 28)], spacing_mm=(0.25, 0.25), width_mm=6.0)
    assert found.fwhm.value == pytest.approx(6.0, abs=0.1)
    assert "slanted-average" not in {c.code for c in found.cautions}
    turned = np.array([np.interp(x - 0.5 * 0.25 * i, x, ridge) for i in range(40)])
    leaning = line_profile(turned, [(5, 2), (5, 28)], spacing_mm=(0.25, 0.25), width_mm=6.0)
    (text,) = [c.text for c in leaning.cautions if c.code == "slanted-average"]
    assert "26.6°" in text  # half a pixel along for each pixel across


def test_a_width_of_few_pixels_is_cautioned():
    found = line_profile(edge(10, 1.0, 0.5), across(10, 1.0, 30), spacing_mm=(1.0, 1.0))
    assert "coarse-sampling" in {c.code for c in found.cautions}


def test_what_is_not_there_is_not_measured(noisy):
    found = line_profile(noisy, [(5, 5), (5, 50)], spacing_mm=(1, 1))
    for answer in (found.edge_width, found.fwhm, found.height, found.middle):
        assert isinstance(answer, NotMeasured)
        assert answer.remedy
    flat = line_profile(np.zeros((20, 20)), [(5, 5), (5, 15)], spacing_mm=(1, 1))
    assert isinstance(flat.edge_width, NotMeasured)
    assert isinstance(flat.fwhm, NotMeasured)
    for line, words in (([(5, 5), (5, 75)], "outside"), ([(5, 5), (5, 8)], "at least 4")):
        refused = line_profile(noisy, line, spacing_mm=(1, 1))
        assert isinstance(refused, NotMeasured)
        assert words in refused.reason


def test_misuse_is_named(noisy):
    with pytest.raises(ArgumentError, match="'points_mm' must be two"):
        line_profile(noisy, [(5, 5)], spacing_mm=(1, 1))
    with pytest.raises(ArgumentError, match="'points_mm' must be finite, each"):
        line_profile(noisy, [(5, 5), (5, 5)], spacing_mm=(1, 1))
    with pytest.raises(ArgumentError, match="'order' must be 0, 1 or 3"):
        line_profile(noisy, [(5, 5), (5, 15)], spacing_mm=(1, 1), order=2)
    with pytest.raises(ArgumentError, match="'width_mm' must not"):
        line_profile(noisy, [(5, 5), (5, 15)], spacing_mm=(1, 1), width_mm=-1)
    with pytest.raises(ArgumentError, match="'step_mm' must"):
        line_profile(noisy, [(5, 5), (5, 15)], spacing_mm=(1, 1), step_mm=0.0)
