"""CT numbers, cups and rings a recipe promises."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.attenuation import material
from ct_measure_plugin.virtual_scanner import (
    AIR,
    WATER,
    Detector,
    FanBeam,
    Grid,
    Kernel,
    ParallelBeam,
    Part,
    Phantom,
    Recipe,
    Spectrum,
    TabulatedMaterial,
    Truth,
    disc_rod,
    monoenergetic,
    simulate_slice,
    tube_spectrum,
)

RODS = {
    "PTFE": (0.0, 30.0),
    "LDPE": (25.0, -10.0),
    "POM": (-28.0, 5.0),
    "air": (-5.0, -33.0),
    "PMMA": (5.0, 5.0),
    "aluminium": (30.0, 22.0),
    "polystyrene": (-20.0, 35.0),
}
# Expected CT numbers at 70 keV by an independent calculation with xraydb (see the attenuation
# test); water and air by definition.
AT_70_KEV = {
    "PTFE": 939.6,
    "LDPE": -99.3,
    "POM": 344.6,
    "air": -998.9,
    "PMMA": 126.1,
    "aluminium": 2220.4,
    "polystyrene": -16.9,
}
BODY = Part(disc_rod((0.0, 0.0), 58.0), WATER)
PARALLEL = ParallelBeam(views=720, channels=260, pitch_mm=0.5)
PLAIN = Recipe(
    phantom=Phantom((BODY,)),
    geometry=PARALLEL,
    kernel=Kernel("hann", 1.0),
    grid=Grid(matrix=256, fov_mm=128.0),
    calibration_path_mm=116.0,
)
WITH_RODS = replace(
    PLAIN,
    phantom=Phantom((BODY, *(Part(disc_rod(c, 6.0), material(n), WATER) for n, c in RODS.items()))),
)


def _away(recipe, y=0.0, x=0.0):
    return np.hypot(recipe.grid.axis_mm(0)[:, None] - y, recipe.grid.axis_mm(1) - x)


def _rod_means(recipe):
    image = simulate_slice(recipe, 0).hu
    return {n: float(image[_away(recipe, *c) < 4.0].mean()) for n, c in RODS.items()}


@pytest.mark.parametrize(
    ("geometry", "kernel"),
    [
        (PARALLEL, Kernel("hann", 1.0)),
        (PARALLEL, Kernel("enhancing", 1.0)),
        (PARALLEL, Kernel("ramp", 1.0)),
        (FanBeam(views=720, channels=270, pitch_mm=0.5), Kernel("hann", 1.0)),
    ],
    ids=["hann", "enhancing", "ramp", "fan"],
)
def test_rods_read_their_table_value_at_one_energy(geometry, kernel):
    """Within 0.2 HU + 0.1 % of the contrast; the list is rounded to 0.05 HU.

    With the pure ramp it is the contrast of aluminium, whose ripples the other rods see.
    """
    recipe = replace(WITH_RODS, geometry=geometry, kernel=kernel)
    truth = Truth(recipe)
    assert truth.effective_energy == 70.0
    for name, found in _rod_means(recipe).items():
        assert truth.hu(material(name)) == pytest.approx(AT_70_KEV[name], abs=0.06)
        assert abs(found - truth.hu(material(name))) < truth.hu_bound(material(name)), name
    image = simulate_slice(recipe, 0).hu
    water = float(image[_away(recipe, 45.0, 20.0) < 6.0].mean())
    assert abs(water) < truth.hu_bound(WATER)
    assert truth.hu_bound(WATER) == pytest.approx(2.42 if kernel.shape == "ramp" else 0.2, abs=0.01)
    assert float(image[_away(recipe) > 61.0].mean()) == pytest.approx(-998.9, abs=0.4)


@pytest.mark.parametrize("correction", ["water", "none"])
def test_rods_in_a_tube_spectrum_stay_within_the_stated_bound(correction):
    recipe = replace(
        WITH_RODS,
        spectrum=tube_spectrum(120.0),
        correction=correction,
        geometry=replace(PARALLEL, views=360),
    )
    truth = Truth(recipe)
    for name, found in _rod_means(recipe).items():
        bound = truth.hu_bound(material(name), path_mm=12.0)
        assert abs(found - truth.hu(material(name))) < bound, name
    assert truth.hu_bound(material("PTFE"), 12.0) > truth.hu_bound(material("PTFE")) > 1.0
    # without the rod's own hardening the truth would miss aluminium by far
    assert abs(_rod_means(recipe)["aluminium"] - truth.hu(material("aluminium"))) > 100.0


@pytest.mark.parametrize("kvp", [80.0, 140.0])
def test_corrected_water_reads_zero_everywhere(kvp):
    """0.2 HU: the bound for water; a cup of 20 HU and more is gone."""
    recipe = replace(PLAIN, spectrum=tube_spectrum(kvp), geometry=replace(PARALLEL, views=360))
    image = simulate_slice(recipe, 0).hu
    inside = _away(recipe) < 54.0
    assert float(np.abs(image[inside]).max()) < 0.5  # single pixels ring more than means
    assert abs(float(image[inside].mean())) < 0.1


def test_uncorrected_water_cups_as_the_closed_form_says():
    """Deeper in the middle; each pixel within 0.2 HU of the inverse Radon transform of p(L)."""
    recipe = replace(PLAIN, spectrum=tube_spectrum(120.0), correction="none")
    truth = Truth(recipe)
    image = simulate_slice(recipe, 0).hu
    inside = _away(recipe) < 54.0
    promised = truth.water_cup(_away(recipe)[inside], 58.0)
    assert float(np.abs(image[inside] - promised).max()) < 0.2
    middle, rim = truth.water_cup([0.0, 54.0], 58.0)
    assert 25.0 < rim - middle < 45.0


def test_the_cup_of_two_lines():
    """μ 0.0227 and 0.0184 mm⁻¹ in equal shares, R = 100 mm: μ(0) = 0.019986, μ(60) = 0.020092.

    From μ(r) = κ₁ − (4/π) κ₂ √(R²−r²) + …, the inverse Radon transform of the cumulant series to
    fourth order; −27.5 HU at the centre relative to κ₁ = 0.02055. 0.3 HU is 6e-6 mm⁻¹.
    """
    water = TabulatedMaterial("two-line water", (60.0, 80.0), (0.227, 0.184))
    empty = TabulatedMaterial("empty", (60.0, 80.0), (0.0, 0.0))
    recipe = Recipe(
        phantom=Phantom((Part(disc_rod((0.0, 0.0), 100.0), water, empty),)),
        geometry=ParallelBeam(views=720, channels=430, pitch_mm=0.5),
        spectrum=Spectrum((60.0, 80.0), (0.5, 0.5)),
        correction="none",
        water=water,
        grid=Grid(matrix=160, fov_mm=160.0),
    )
    image = simulate_slice(recipe, 0).hu
    scale = recipe.calibration
    factor = float(scale.correct(np.ones(1))[0])  # the one factor of the scale
    mu = (image / 1000.0 + 1.0) * scale.mu_water / 10.0 - scale.mu_air / 10.0
    away = _away(recipe)
    for radius, expected in ((0.0, 0.019986), (60.0, 0.020092)):
        ring = np.abs(away - radius) < (3.0 if radius == 0 else 0.5)
        assert float(mu[ring].mean()) / factor == pytest.approx(expected, abs=6e-6)
    # the air of the scale, 2e-5 mm⁻¹, is no part of the closed form
    promised = (Truth(recipe).water_cup([0.0, 60.0], 100.0) / 1000.0 + 1.0) * scale.mu_water / 10
    promised = (promised - scale.mu_air / 10) / factor
    np.testing.assert_allclose(promised, [0.019986, 0.020092], atol=3e-5)


def _ring_recipe(shape, channel, lookup="linear"):
    body = TabulatedMaterial("body", (1.0, 500.0), (0.193, 0.193))
    return Recipe(
        phantom=Phantom((Part(disc_rod((0.0, 0.0), 90.0), body),)),
        geometry=ParallelBeam(views=720, channels=400, pitch_mm=0.5, arc_deg=360),
        detector=Detector(gain_errors=((channel, 0.01),)),
        kernel=Kernel(shape, 1.0),
        grid=Grid(matrix=280, fov_mm=140.0, lookup=lookup),
        water=body,
    )


def _ring_only(recipe):
    clean = replace(recipe, detector=Detector())
    return simulate_slice(recipe, 0).hu - simulate_slice(clean, 0).hu


@pytest.mark.parametrize(("channel", "published"), [(220, -15.8), (260, -9.3), (320, -6.6)])
def test_a_drifted_channel_makes_a_ring_of_known_depth(channel, published):
    """+1 % gain at radius 10.25, 30.25, 60.25 mm, Hann, linear lookup: -15.8, -9.3, -6.6 HU.

    The values are of an independent simulation; 5 %, since they depend on where its pixels lay.
    The whole profile of ours follows the closed form within 1 % of its depth.
    """
    recipe = _ring_recipe("hann", channel)
    truth, ring = Truth(recipe), _ring_only(recipe)
    radius = (channel - 199.5) * 0.5
    away = _away(recipe)
    near = np.abs(away - radius) < 5.0
    promised = truth.rings(away[near])
    assert promised.min() == pytest.approx(published, rel=0.05)
    assert float(np.abs(ring[near] - promised).max()) < 0.01 * abs(published)
    # the deepest pixel lies within a pixel of the channel's radius
    assert abs(away[near][ring[near].argmin()] - radius) < 0.5


def test_rings_weaken_with_the_square_root_of_their_radius():
    """Depth times √t₀ constant within 2 % from 10 to 60 mm, for two kernels."""
    for shape in ("hann", "ramp"):
        scaled = []
        for channel in (220, 260, 320):
            radius = (channel - 199.5) * 0.5
            near = np.linspace(radius - 1.0, radius + 1.0, 401)
            depth = Truth(_ring_recipe(shape, channel, "fine")).rings(near).min()
            scaled.append(depth * np.sqrt(radius))
        assert np.ptp(scaled) < 0.02 * abs(np.mean(scaled))


def test_a_dead_channel_left_alone_is_a_bright_ring_and_mended_hardly_any():
    body = replace(_ring_recipe("hann", 260), detector=Detector(dead_channels=(260,)))
    ring = np.abs(_away(body) - 30.25) < 0.5
    left = _ring_only(body)
    mended = _ring_only(replace(body, detector=Detector(dead_channels=(260,), mend_dead=True)))
    assert float(left[ring].max()) > 1000.0
    assert float(np.abs(mended[ring]).max()) < 1.0


def test_scatter_darkens_the_middle_and_withdraws_the_truth():
    recipe = replace(PLAIN, detector=Detector(scatter_ratio=0.2))
    image = simulate_slice(recipe, 0).hu
    middle = float(image[_away(recipe) < 10].mean())
    rim = float(image[np.abs(_away(recipe) - 50) < 3].mean())
    assert middle < rim - 5.0 < 0.0
    assert Truth(recipe).hu_bound(WATER) == np.inf


def test_air_is_air_and_the_scale_has_two_fixed_points():
    truth = Truth(replace(PLAIN, spectrum=monoenergetic(60.0)))
    assert truth.hu(AIR) == pytest.approx(-998.9, abs=0.06)
    assert truth.hu(WATER) == 0.0
    with pytest.raises(ArgumentError, match="'radius_mm' must lie in 0 <= r < 58"):
        truth.water_cup([58.0], 58.0)
