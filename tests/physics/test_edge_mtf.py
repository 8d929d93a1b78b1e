"""The edge MTF against kernels whose MTF is known, with and without noise."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from scipy.interpolate import CubicSpline
from truth_images import (
    EDGE,
    GAUSS,
    HANN,
    KERNELS,
    check_edge_response,
    edge_image,
    edge_response,
    noise,
)

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics import edge_mtf
from ct_measure_plugin.physics.results import NotMeasured, Quantity

SPACING = (0.5, 0.5)


def percent(found, kernel, level=0.5):
    name = {0.5: "f50", 0.1: "f10"}[level]
    return 100 * (getattr(found, name).value / kernel.level(level) - 1)


def test_the_truth_images_agree_with_adaptive_quadrature():
    assert check_edge_response() < 1e-8


def test_the_gaussian_truth_is_its_closed_form():
    """f50 = sqrt(ln 2 / 2) / (π σ) = 0.187391 / σ, f10 = 0.341541 / σ."""
    assert GAUSS.level(0.5) == pytest.approx(0.187391 / 0.6, rel=1e-5)
    assert GAUSS.level(0.1) == pytest.approx(0.341541 / 0.6, rel=1e-5)


@pytest.mark.parametrize("method", ["fitted", "conventional"])
@pytest.mark.parametrize("kernel", KERNELS, ids=lambda k: k.name)
@pytest.mark.parametrize(
    ("angle", "pixel"),
    [
        *[(1.5, 0.5), (2, 0.3), (4, 0.3), (4, 0.5), (4, 0.7), (12, 0.5)],
        *[(-20, 0.6), (27, 0.4), (31, 0.5), (36, 0.6), (43, 0.4)],
    ],
)
def test_without_noise_the_bias_is_below_half_a_percent(kernel, method, angle, pixel):
    shape = (96, 96) if abs(angle) < 2 else (64, 64)
    image = edge_image(kernel, angle=angle, spacing=(pixel, pixel), shape=shape, shift=0.13)
    found = edge_mtf(image, spacing_mm=(pixel, pixel), method=method)
    assert found, found
    assert abs(percent(found, kernel)) < 0.5
    assert abs(percent(found, kernel, 0.1)) < 0.5
    assert found.angle.value == pytest.approx(abs(angle), abs=0.01)


@pytest.mark.parametrize("method", ["fitted", "conventional"])
@pytest.mark.parametrize("kernel", KERNELS, ids=lambda k: k.name)
def test_the_curve_is_right_beyond_the_pixels_nyquist_frequency(kernel, method):
    """At 0.7 mm pixels Nyquist is 0.714 mm⁻¹; the edge-enhancing kernel reaches to 1."""
    found = edge_mtf(edge_image(kernel, spacing=(0.7, 0.7)), spacing_mm=(0.7, 0.7), method=method)
    assert found.mtf.x[-1] >= 1.2 * 0.5 / 0.7
    upto = found.mtf.x <= 1.2 * 0.5 / 0.7
    truth = kernel.mtf(found.mtf.x[upto])
    np.testing.assert_allclose(found.mtf.y[upto], truth, atol=0.01)
    aliased = kernel.mtf(0.5 / 0.7) > 0.1
    assert ("aliasing" in {c.code for c in found.cautions}) == aliased
    peak = kernel.mtf(np.linspace(0, 1, 1001)).max()
    assert found.peak.value == pytest.approx(peak, abs=0.01)
    assert (found.overshoot.value > 0.05) == (kernel is EDGE)


def test_pixels_need_not_be_square():
    image = edge_image(HANN, spacing=(0.6, 0.4), angle=7, shape=(48, 72))
    found = edge_mtf(image, spacing_mm=(0.6, 0.4))
    assert abs(percent(found, HANN)) < 0.5
    assert found.angle.value == pytest.approx(7, abs=0.01)


@pytest.mark.parametrize("method", ["fitted", "conventional"])
def test_sign_and_side_of_the_contrast_do_not_matter(method):
    rng = np.random.default_rng(4)
    image = edge_image(GAUSS) + rng.normal(0, 3, (64, 64))
    first = edge_mtf(image, spacing_mm=SPACING, method=method)
    for other in (-image, image[:, ::-1], image[::-1], image.T, 40 - image[::-1, ::-1]):
        found = edge_mtf(other, spacing_mm=SPACING, method=method)
        assert found.f50.value == pytest.approx(first.f50.value, rel=1e-6)
        assert found.f50.uncertainty == pytest.approx(first.f50.uncertainty, rel=1e-4)


def test_the_found_line_is_where_the_edge_is():
    image = edge_image(GAUSS, angle=5.0, shift=0.21)
    found = edge_mtf(image, spacing_mm=SPACING)
    assert found.position.value == pytest.approx(0.21, abs=1e-3)
    # the normal (cos 5°, sin 5°) has y pointing down: 175° counter-clockwise on the screen
    assert found.normal_direction.value == pytest.approx(175.0, abs=0.01)
    middle = 63 / 2 * 0.5
    for y, x in found.ends_mm:
        distance = np.cos(np.radians(5)) * (x - middle) + np.sin(np.radians(5)) * (y - middle)
        assert distance == pytest.approx(0.21, abs=1e-3)


def test_the_binning_correction_is_not_forgotten():
    """Bins of 0.25 mm without the corrections for bin and difference lower f50 by 3.4 %."""
    from ct_measure_plugin.physics.edge_bins import bin_by_distance
    from ct_measure_plugin.physics.edge_line import locate_edge
    from ct_measure_plugin.physics.mtf_curve import conventional_mtf, level_frequency

    image = edge_image(GAUSS, angle=3.0, shape=(128, 128))
    line = locate_edge(image, SPACING)
    bins = bin_by_distance(line.distance.ravel(), image.ravel(), 0.25, half=9.0)
    middles, esf = bins.evenly(8.0)
    f = np.linspace(0, 1, 241)
    spread = conventional_mtf(middles, esf, np.zeros((65, 65)), half=7.0, frequency=f)
    bare = spread.mtf * np.sinc(2 * f * 0.25) * np.sinc(f * 0.25)
    corrected = level_frequency(f, spread.mtf, None, 0.5)
    without = level_frequency(f, bare, None, 0.5)
    assert 100 * (corrected.value / GAUSS.level(0.5) - 1) == pytest.approx(0.0, abs=0.5)
    assert 100 * (without.value / GAUSS.level(0.5) - 1) == pytest.approx(-3.4, abs=0.3)


READ = ("f50", "f10", "width", "contrast", "position", "angle", "noise")


@cache
def trial(kernel, coloured, cnr, count, methods=("fitted", "conventional")):
    """Values and uncertainties of READ in repeats, shape (methods, count, READ, 2)."""
    rng = np.random.default_rng(12)
    rows = {m: [] for m in methods}
    place = np.linspace(-18, 18, 7201)
    edge = CubicSpline(place, edge_response(kernel, place))
    y = (np.arange(64) - 31.5) * SPACING[0]
    across = np.cos(np.radians(4)) * y[None, :] + np.sin(np.radians(4)) * y[:, None]
    for _ in range(count):
        shift = rng.uniform(-0.5, 0.5)
        image = 100 * edge(across - shift)
        image += noise(rng, image.shape, SPACING, 100 / cnr, kernel if coloured else None)
        for method in methods:
            found = edge_mtf(image, spacing_mm=SPACING, method=method)
            values = [getattr(found, name) for name in READ]
            pairs = [
                (q.value, q.uncertainty) if isinstance(q, Quantity) else (np.nan, np.nan)
                for q in values
            ]
            rows[method].append(pairs)
            rows[method][-1][READ.index("position")] = (
                found.position.value - shift,
                found.position.uncertainty,
            )
    return np.array([rows[m] for m in methods])


#: RMS error of the fit over that of the conventional route: f50 and f10 for each kernel.
WANTED = {"gauss": (0.5, 0.6), "hann": (0.5, 0.6), "edge": (0.7, 0.6)}


@pytest.mark.parametrize("level", [0.5, 0.1], ids=["f50", "f10"])
@pytest.mark.parametrize("coloured", [False, True], ids=["white", "coloured"])
@pytest.mark.parametrize("kernel", KERNELS, ids=lambda k: k.name)
def test_in_noise_the_fit_beats_the_conventional_route(kernel, coloured, level):
    """CNR 20, 64 × 64 pixels, 4°. 100 boxes fix an RMS error to 7 % and a ratio of two correlated
    ones to about 8 %, of which three are allowed; the figures of longer runs stand on the page."""
    check_in_noise(kernel, coloured, level, 20, 100)


@pytest.mark.long
@pytest.mark.parametrize("cnr", [20, 10])
@pytest.mark.parametrize("level", [0.5, 0.1], ids=["f50", "f10"])
@pytest.mark.parametrize("coloured", [False, True], ids=["white", "coloured"])
@pytest.mark.parametrize("kernel", KERNELS, ids=lambda k: k.name)
def test_in_noise_over_many_boxes(kernel, coloured, level, cnr):
    check_in_noise(kernel, coloured, level, cnr, 400)


#: Found 1.03 to 1.07 times what is wanted; what limits them stands on the validation page.
HARD = {
    ("gauss", True, 0.5),
    ("hann", False, 0.5),
    ("hann", True, 0.5),
    ("edge", True, 0.5),
    ("edge", True, 0.1),
}


def check_in_noise(kernel, coloured, level, cnr, count):
    hard = (kernel.name, coloured, level) in HARD
    found = trial(kernel, coloured, cnr, count)[:, :, READ.index("f50" if level == 0.5 else "f10")]
    truth = kernel.level(level)
    errors = 100 * (found[..., 0] / truth - 1)
    rms = np.sqrt(np.nanmean(errors**2, axis=1))
    doubt = 0.8 / np.sqrt(count)  # of the ratio of two correlated RMS errors
    wanted = WANTED[kernel.name][level != 0.5] * (1.08 if hard else 1.0)
    assert rms[0] < wanted * rms[1] * (1 + 3 * doubt)
    fitted = errors[0]
    allowed = 1.2 if level == 0.5 else 3.0  # -1.1 % found for one kernel at CNR 10
    assert abs(fitted.mean()) < allowed + 3 * fitted.std() / np.sqrt(count)
    covered = np.abs(found[0, :, 0] - truth) < 1.96 * found[0, :, 1]
    # of n intervals at 93 %, so many fewer hold the truth once in 700 runs
    assert covered.sum() >= 0.93 * count - 3 * np.sqrt(0.93 * 0.07 * count)


@pytest.mark.parametrize("name", ["width", "contrast", "position", "angle", "noise"])
@pytest.mark.parametrize("coloured", [False, True], ids=["white", "coloured"])
def test_stated_uncertainties_are_the_scatter_of_repeats(coloured, name):
    """100 repeats fix a scatter to 7 %; three of these are 0.79 to 1.21. Averaging over models
    states the width's uncertainty up to a fifth too large."""
    found = trial(HANN, coloured, 20, 100)[:, :, READ.index(name)]
    ratio = np.median(found[..., 1], axis=1) / found[..., 0].std(axis=1, ddof=1)
    assert (ratio > 0.79).all()
    assert (ratio < (1.45 if name == "width" else 1.21)).all()
    truth = {"width": 1.25, "contrast": 100.0, "position": 0.0, "angle": 4.0, "noise": 5.0}[name]
    off = np.abs(found[..., 0].mean(axis=1) - truth) / found[..., 0].std(axis=1)
    # three standard errors of the mean; the conventional width is smoothed by 0.8 %, and priors
    # at zero may shift a fitted contrast by a part of its scatter
    allowed = {"width": 0.2, "contrast": 0.2}.get(name, 0.0)
    assert (off < 3 / np.sqrt(100) + allowed).all()


@pytest.mark.parametrize("kernel", KERNELS, ids=lambda k: k.name)
def test_width_and_overshoot_are_the_kernels(kernel):
    """FWHM and overshoot of the exact line and edge response, tabulated every 0.5 µm."""
    x = np.linspace(0, 4, 8001)
    edge = edge_response(kernel, x)
    line = np.gradient(edge, x, edge_order=2)
    after = int(np.argmax(line < line[0] / 2))
    half = np.interp(-line[0] / 2, -line[after - 1 : after + 1], x[after - 1 : after + 1])
    for method, tolerance in (("fitted", 1e-3), ("conventional", 0.02)):
        found = edge_mtf(edge_image(kernel), spacing_mm=SPACING, method=method)
        assert found.width.value == pytest.approx(2 * half, rel=tolerance)
        assert found.overshoot.value == pytest.approx(edge.max() - 1, abs=1e-3)
        assert found.contrast.value == pytest.approx(100, abs=0.01)
        assert np.ptp(found.esf.y) == pytest.approx(100 * (2 * edge.max() - 1), rel=2e-3)
        step = found.lsf.x[1] - found.lsf.x[0]
        assert found.lsf.y.sum() * step == pytest.approx(1.0, abs=2e-3)


def _white(sd):
    return np.random.default_rng(5).normal(0, sd, (64, 64))


def _curved():
    y, x = np.mgrid[:64, :64] * 0.5
    from scipy.special import ndtr

    return 100 * ndtr((20 - np.hypot(y - 13, x - 1.0)) / 0.6)


def _blob():
    y, x = np.mgrid[:64, :64]
    return 60.0 * (np.hypot(y - 14, x - 12) < 5) + _white(2)


REFUSALS = {
    "leans": lambda: edge_image(GAUSS, angle=0.4),
    "leaves the box": lambda: edge_image(GAUSS, shift=14.5),
    "curved": _curved,
    "clipped": lambda: np.minimum(np.rint(edge_image(GAUSS, contrast=1000) + _white(20)), 990),
    "too low": lambda: edge_image(GAUSS) + _white(60),
    "something else": lambda: edge_image(GAUSS) + _blob(),
    "all pixels": lambda: np.full((64, 64), 7.0),
    "samples across": lambda: edge_image(EDGE, angle=45.0, spacing=(0.8, 0.8)),
}


@pytest.mark.parametrize("words", REFUSALS)
def test_what_cannot_be_measured_is_refused_in_words(words):
    spacing = (0.8, 0.8) if words == "samples across" else SPACING
    found = edge_mtf(REFUSALS[words](), spacing_mm=spacing)
    assert isinstance(found, NotMeasured)
    assert words in found.reason
    assert found.remedy


def test_a_sloping_background_is_taken_out_and_said():
    x = np.arange(64) * 0.5
    image = edge_image(GAUSS) + 0.8 * (x - 16) + _white(1)
    found = edge_mtf(image, spacing_mm=SPACING)
    assert "background-gradient" in {c.code for c in found.cautions}
    assert abs(percent(found, GAUSS)) < 1.0


def test_a_short_plateau_is_said():
    image = edge_image(GAUSS, shape=(64, 20))
    found = edge_mtf(image, spacing_mm=SPACING)
    assert "tail-truncation" in {c.code for c in found.cautions}


def test_misuse_is_named():
    with pytest.raises(ArgumentError, match="'method' must be"):
        edge_mtf(edge_image(GAUSS), spacing_mm=SPACING, method="best")
    with pytest.raises(ArgumentError, match="'spacing_mm' must be"):
        edge_mtf(edge_image(GAUSS), spacing_mm=(0.5, 0.0))
    with pytest.raises(ArgumentError, match="'image' must be 2-D"):
        edge_mtf(np.zeros(9), spacing_mm=SPACING)
    with pytest.raises(ArgumentError, match="finite"):
        edge_mtf(np.full((32, 32), np.nan), spacing_mm=SPACING)
