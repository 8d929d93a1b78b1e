"""Bar patterns whose Fourier series passes through a known MTF."""

from __future__ import annotations

import numpy as np
import pytest
from truth_images import EDGE, GAUSS, HANN, Kernel, bars, noise

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.bar_pattern import bar_pattern
from ct_measure_plugin.physics.results import NotMeasured

SPACING = (0.25, 0.25)
NARROW = Kernel("narrow", lambda f: np.exp(-2 * (np.pi * 0.3 * np.asarray(f, float)) ** 2), 3.0)


def flats(sd=0.0, seed=1, kernel=None, height=200.0):
    rng = np.random.default_rng(seed)
    return [
        side * height / 2
        + (noise(rng, (60, 60), SPACING, sd, kernel) if sd else 0.0)
        + np.zeros((60, 60))
        for side in (1, -1)
    ]


def test_one_group_reads_as_its_formula_says():
    """σ 0.3 mm: MTF 0.5275 at 0.6 mm⁻¹. At 0.2 mm⁻¹ the plain formula gives 0.9485, the MTF is
    0.9314 (independent calculation)."""
    fine = bar_pattern([bars(NARROW, 0.6)], [0.6], *flats(), spacing_mm=SPACING)
    assert fine.mtf.y[0] == pytest.approx(0.5275, rel=2e-3)
    alone = bar_pattern([bars(NARROW, 0.2)], [0.2], *flats(), spacing_mm=SPACING)
    assert alone.mtf.y[0] == pytest.approx(0.9485, rel=3e-3)
    # it says that what lies beyond is unknown
    assert alone.mtf.y_uncertainty[0] > 0.02
    both = bar_pattern(
        [bars(NARROW, 0.2), bars(NARROW, 0.6)], [0.2, 0.6], *flats(), spacing_mm=SPACING
    )
    assert both.mtf.y[0] == pytest.approx(0.9314, rel=2e-3)


@pytest.mark.parametrize("kernel", [GAUSS, HANN, EDGE], ids=lambda k: k.name)
@pytest.mark.parametrize("angle", [0.0, 8.0, 45.0])
def test_many_groups_give_the_curve(kernel, angle):
    """Groups as a test object has them; between them powers are interpolated: 1 %."""
    pairs = [0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9]
    groups = [bars(kernel, f, angle=angle) for f in pairs]
    found = bar_pattern(groups, pairs, *flats(), spacing_mm=SPACING)
    np.testing.assert_allclose(found.mtf.y, kernel.mtf(found.mtf.x), atol=0.012)
    assert found.f50.value == pytest.approx(kernel.level(0.5), rel=0.01)
    assert found.contrast.value == pytest.approx(200)


def test_a_box_need_not_hold_whole_periods():
    """Without a window, 4.5 periods of a wave are off by up to 6 % with the phase."""
    values = []
    for phase in np.linspace(0, 0.5, 6):
        box = bars(NARROW, 0.5, angle=0.0, phase=phase, shape=(40, 38))
        values.append(bar_pattern([box], [0.5], *flats(), spacing_mm=SPACING).mtf.y[0])
    assert np.ptp(values) / np.mean(values) < 0.01


@pytest.mark.parametrize("coloured", [False, True], ids=["white", "coloured"])
def test_noise_is_taken_away_and_its_doubt_is_the_scatter(coloured):
    """40 repeats fix a scatter to 11 %. Noise 25 on bars of ±100."""
    rng = np.random.default_rng(5)
    kernel = HANN if coloured else None
    clean = bars(HANN, 0.5)
    rows = []
    for seed in range(40):
        # a second group, beyond the kernel, says that there is no third harmonic
        pair = [box + noise(rng, clean.shape, SPACING, 25, kernel) for box in (clean, 0 * clean)]
        found = bar_pattern(pair, [0.5, 1.5], *flats(25, seed, kernel), spacing_mm=SPACING)
        rows.append((found.mtf.y[0], found.mtf.y_uncertainty[0]))
    value, doubt = np.array(rows).T
    truth = float(HANN.mtf(0.5))
    assert abs(value.mean() - truth) < 3 * value.std() / np.sqrt(40) + 0.01
    assert 0.65 < np.median(doubt) / value.std() < 2.0


def test_groups_that_do_not_stand_out_are_told_and_left_out():
    pairs = [0.4, 0.79]
    rng = np.random.default_rng(3)
    groups = [bars(HANN, f) + rng.normal(0, 40, (80, 120)) for f in pairs]
    found = bar_pattern(groups, pairs, *flats(40), spacing_mm=SPACING)
    np.testing.assert_array_equal(found.mtf.x, [0.4])
    (caution,) = [c for c in found.cautions if c.code == "noise-floor"]
    assert "0.79" in caution.text
    assert found.highest.value == 0.4
    assert isinstance(found.f10, NotMeasured)


def test_bars_that_beat_with_the_pixels_are_left_out():
    straight = bars(EDGE, 0.9, angle=0.0, spacing=(0.5, 0.5))
    slanted = bars(EDGE, 0.9, angle=20.0, spacing=(0.5, 0.5))
    options = {"spacing_mm": (0.5, 0.5)}
    refused = bar_pattern([straight], [0.9], *flats(), **options)
    assert isinstance(refused, NotMeasured)
    assert {c.code for c in refused.cautions} == {"aliasing"}
    found = bar_pattern([slanted], [0.9], *flats(), **options)
    assert found.mtf.y[0] == pytest.approx(float(EDGE.mtf(0.9)), rel=0.01)


def test_too_few_periods_are_left_out():
    refused = bar_pattern([bars(GAUSS, 0.2, shape=(40, 60))], [0.2], *flats(), spacing_mm=SPACING)
    assert isinstance(refused, NotMeasured)
    assert {c.code for c in refused.cautions} == {"few-pixels"}


def test_alike_materials_are_refused():
    found = bar_pattern([bars(GAUSS, 0.4)], [0.4], *flats(5, height=0.5), spacing_mm=SPACING)
    assert isinstance(found, NotMeasured)
    assert "does not stand out" in found.reason


def test_misuse_is_named():
    box = bars(GAUSS, 0.4)
    with pytest.raises(ArgumentError, match="'frequencies' must be one a group"):
        bar_pattern([box], [0.4, 0.5], *flats(), spacing_mm=SPACING)
    with pytest.raises(ArgumentError, match="'frequencies' must be greater"):
        bar_pattern([box], [-0.4], *flats(), spacing_mm=SPACING)
    with pytest.raises(ArgumentError, match=r"'groups\[0\]' must be 2-D"):
        bar_pattern([box[0]], [0.4], *flats(), spacing_mm=SPACING)
    with pytest.raises(ArgumentError, match="'bar' must hold finite"):
        bar_pattern([box], [0.4], np.full((9, 9), np.nan), flats()[1], spacing_mm=SPACING)
