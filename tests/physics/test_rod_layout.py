"""Rods found on slices whose turn and shift are known, and layouts that cannot be told."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from rod_scenes import NAMES, SPIRAL, layout, scene, turn
from scipy import ndimage

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.attenuation import MATERIALS
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.rod_candidates import find_candidates
from ct_measure_plugin.physics.rod_layout import find_rods

SPACING = (0.5, 0.5)
RING = tuple((22 * math.sin(math.tau * k / 8), 22 * math.cos(math.tau * k / 8)) for k in range(8))


def off_by(found, rods, angle, shift=(38.0, 40.0)):
    """Distance of each found rod from where it is, mm."""
    true = [np.add(turn(rod.center_mm, angle), shift) for rod in rods]
    return [math.hypot(one.y.value - t[0], one.x.value - t[1])
            for one, t in zip(found.rods, true, strict=True)]  # fmt: skip


@pytest.mark.parametrize("angle", [0.0, 1.0, 45.0, 90.0, 133.7, 180.0, 247.0, 359.0])
def test_any_rotation_is_found(angle):
    """Centres to a tenth of a pixel, but for polystyrene, which differs from water by 17 HU."""
    rods = layout()
    found = find_rods(scene(rods, angle=angle, seed=1), rods, spacing_mm=SPACING)
    assert found, found
    turned = (found.rotation.value - angle + 180) % 360 - 180
    assert abs(turned) < 3 * found.rotation.uncertainty < 0.3
    off = off_by(found, rods, angle)
    assert max(d for d, name in zip(off, NAMES, strict=True) if name != "polystyrene") < 0.05
    assert off[NAMES.index("polystyrene")] < 0.4
    assert found.scale.value == pytest.approx(1.0, abs=3 * found.scale.uncertainty)
    assert [rod.material for rod in found.rods] == list(NAMES)


def test_pixels_need_not_be_square():
    rods = layout()
    image = scene(rods, angle=70, shape=(100, 160), spacing=(0.8, 0.5))
    found = find_rods(image, rods, spacing_mm=(0.8, 0.5))
    assert found.rotation.value == pytest.approx(70, abs=0.2)
    assert np.median(off_by(found, rods, 70)) < 0.05


@pytest.mark.parametrize("correlation", [0.0, 1.0])
def test_centres_are_as_uncertain_as_they_say(correlation):
    """40 slices of one rod of 120 HU in noise of 10 HU: an SD from 80 numbers is known to 8 %, and
    the correlation of the noise is itself an estimate."""
    rod = layout([(0.0, 0.0)], ["PMMA"])
    rng = np.random.default_rng(4)
    off, stated = [], []
    for _ in range(40):
        noise = ndimage.gaussian_filter(rng.normal(0, 1, (64, 64)), correlation)
        noise *= 10 / noise.std()
        image = scene(rod, shift=(16.1, 15.7), shape=(64, 64), noise=0.0) + noise
        [one] = find_candidates(image, SPACING, [4.0])
        off += [one.center[0] - 16.1, one.center[1] - 15.7]
        stated.append(one.u_center)
    assert np.std(off) / np.mean(stated) == pytest.approx(1.0, abs=0.3)
    assert abs(np.mean(off)) < 3 * np.std(off) / math.sqrt(len(off))


def test_the_mirror_image_is_refused():
    rods = layout()
    turned_over = [replace(r, center_mm=(r.center_mm[0], -r.center_mm[1])) for r in rods]
    found = find_rods(scene(turned_over, angle=20), rods, spacing_mm=SPACING)
    assert isinstance(found, NotMeasured)
    assert found.reason == "the layout fits only as its mirror image"


def test_a_regular_ring_is_told_by_its_materials():
    rods = layout(RING)
    found = find_rods(scene(rods, angle=100), rods, spacing_mm=SPACING)
    assert found.rotation.value == pytest.approx(100, abs=0.3)
    assert [rod.name for rod in found.rods] == list(NAMES)


def test_a_regular_ring_without_materials_is_ambiguous():
    rods = layout(RING, [f"hole {k}" for k in range(8)])
    found = find_rods(scene(rods, angle=10), rods, spacing_mm=SPACING)
    assert isinstance(found, NotMeasured)
    assert "fits in two ways" in found.reason
    assert "enter materials" in found.remedy


def test_two_plastics_too_alike_for_their_densities_are_ambiguous():
    """A half turn swaps PMMA and polycarbonate, 22 HU apart; densities are known to 9.5 HU."""
    places = ((0.0, 25.0), (0.0, -25.0), (14.0, 0.0), (-14.0, 0.0))
    names = ("PMMA", "polycarbonate", "POM", "POM")
    rods = layout(places, names)
    refused = find_rods(scene(rods), rods, spacing_mm=SPACING)
    assert isinstance(refused, NotMeasured)
    assert "180° apart" in refused.reason
    known = [
        replace(r, material=replace(r.material, density_uncertainty_g_cm3=0.001)) for r in rods
    ]
    assert find_rods(scene(rods), known, spacing_mm=SPACING).rods[0].material == "PMMA"


def test_like_rods_that_change_places_are_no_ambiguity():
    """The layout looks the same after a half turn, and calls every place the same."""
    places = ((0.0, 25.0), (0.0, -25.0), (14.0, 0.0), (-14.0, 0.0))
    rods = layout(places, ("PTFE", "PTFE", "POM", "POM"))
    found = find_rods(scene(rods, angle=30), rods, spacing_mm=SPACING)
    assert found, found
    assert found.rotation.value % 180 == pytest.approx(30, abs=0.3)


def test_mixed_up_rods_are_found_where_the_layout_has_them():
    """Someone put polystyrene where PMMA should be: that is for the line to tell."""
    rods = layout()
    wrong = {NAMES.index("PMMA"): float(MATERIALS["polystyrene"].hu(70.0))}
    found = find_rods(scene(rods, angle=75, values=wrong), rods, spacing_mm=SPACING)
    assert found.rotation.value == pytest.approx(75, abs=0.3)


def test_a_scale_that_is_off_does_not_hide_the_rods():
    rods = layout()
    off = {k: 1.05 * float(rod.material.hu(90.0)) + 20 for k, rod in enumerate(rods)}
    found = find_rods(scene(rods, angle=75, values=off), rods, spacing_mm=SPACING)
    assert found.rotation.value == pytest.approx(75, abs=0.3)


def test_a_rod_like_its_surroundings_is_placed():
    rods = layout(SPIRAL, (*NAMES[:5], "water", *NAMES[6:]))
    found = find_rods(scene(rods, angle=10), rods, spacing_mm=SPACING)
    assert [rod.seen for rod in found.rods].count("placed") == 1
    assert found.rods[5].seen == "placed"
    assert off_by(found, rods, 10)[5] < 0.1
    assert [c.code for c in found.cautions] == ["rod-placed"]


def test_distances_that_are_off_are_told():
    """A pixel size that is wrong by 2 %."""
    rods = layout()
    found = find_rods(scene(rods), rods, spacing_mm=(0.51, 0.51))
    assert found.scale.value == pytest.approx(1.02, abs=0.002)
    assert "layout-scale" in {c.code for c in found.cautions}


def test_what_else_is_round_does_not_mislead():
    """A phantom's own border, and two more rods that the layout does not know."""
    rods = layout()
    extra = layout([(0.0, 28.0), (-27.0, -10.0)], ["POM", "air"])
    image = scene([*rods, *extra], angle=40)
    y, x = 0.5 * np.mgrid[:160, :160]
    image[np.hypot(y - 38, x - 40) > 36] = -1000
    found = find_rods(image, rods, spacing_mm=SPACING)
    assert found.rotation.value == pytest.approx(40, abs=0.2)


def test_no_rods_are_refused():
    image = np.random.default_rng(1).normal(0, 10, (160, 160))
    found = find_rods(image, layout(), spacing_mm=SPACING)
    assert isinstance(found, NotMeasured)
    assert "of the layout's 8 rods were found" in found.reason


def test_another_phantom_is_refused():
    rods = layout()
    other = layout([(y * 1.3 + 4, -x * 0.7) for y, x in SPIRAL], NAMES)
    found = find_rods(scene(other, angle=15), rods, spacing_mm=SPACING)
    assert isinstance(found, NotMeasured)


def test_misuse_is_named():
    image = scene(layout())
    with pytest.raises(ArgumentError, match="'layout' must hold at least 3 rods, got 2"):
        find_rods(image, layout()[:2], spacing_mm=SPACING)
    with pytest.raises(ArgumentError, match="'spacing_mm'"):
        find_rods(image, layout(), spacing_mm=(0.5, 0.0))
    with pytest.raises(ArgumentError, match="'image' must be finite"):
        find_rods(np.full((20, 20), np.nan), layout(), spacing_mm=SPACING)
    with pytest.raises(ArgumentError, match="'diameter_mm' must be greater than 0"):
        layout(diameter=0.0)
