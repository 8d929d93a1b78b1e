"""What a slice offers for measuring an MTF: proposals that measure, and reasons for the rest."""

from __future__ import annotations

import numpy as np
import pytest
from target_scenes import F50, add_block, add_rod, add_wire, grid, water
from truth_images import HANN, noise

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.targets import Target, find_targets

PIXELS = (0.5, 0.5)


def scene(sd=0.0):
    """A block, a rod and a wire, well apart."""
    image = water((200, 200), sd)
    add_block(image, (28.0, 30.0), 26.0, 5.0, 300.0)
    add_rod(image, (70.0, 28.0), 8.0, -200.0)
    add_wire(image, (60.2, 70.1), 900.0)
    return image


def of_kind(found, kind) -> list[Target]:
    return [one for one in found.targets if one.kind == kind]


def reasons(found) -> str:
    return " | ".join(one.why.reason for one in found.others)


@pytest.mark.parametrize("sd", [0.0, 6.0])
def test_edges_rods_and_wires_are_found_and_measure_the_truth(sd):
    found = find_targets(scene(sd), spacing_mm=PIXELS, z_mm=3.0)
    assert [len(of_kind(found, kind)) for kind in ("edge", "rod", "wire")] == [4, 1, 1]
    for one in found.targets:
        # noise-free: 0.5 % is what the measurements are held to; with noise: 3.5 standard
        # uncertainties, which six numbers all keep but once in 360 times
        room = 0.005 * F50 if sd == 0 else 0.005 * F50 + 3.5 * one.f50.uncertainty
        assert one.f50.value == pytest.approx(F50, abs=room), one.region
        assert one.region.z_mm == 3.0
    assert of_kind(found, "rod")[0].radius.value == pytest.approx(8.0, abs=0.03)
    assert [round(one.angle.value) for one in of_kind(found, "edge")] == [5] * 4
    assert {one.region.name for one in found.targets} >= {"edge-1", "edge-4", "rod-1", "wire-1"}
    doubts = [one.doubt for one in found.targets]
    assert doubts == sorted(doubts)
    assert found.blur.value == pytest.approx(2.3548 * 0.6, rel=0.03)  # a Gaussian's FWHM


def test_contrasts_are_those_of_the_objects():
    found = find_targets(scene(6.0), spacing_mm=PIXELS)
    contrast = {one.region.name: one.contrast for one in found.targets}
    ratio = {one.region.name: one.contrast_to_noise.value for one in found.targets}
    for name, truth in (("edge-1", 300.0), ("rod-1", -200.0), ("wire-1", 900.0)):
        # a spot's own pixel grid hides up to 1 % of its height
        room = 4 * contrast[name].uncertainty + (9.0 if name == "wire-1" else 0.0)
        assert contrast[name].value == pytest.approx(truth, abs=room), name
        # the noise is that of some hundred pixels: 5 to 9 % (1 sigma)
        assert ratio[name] == pytest.approx(abs(truth) / 6.0, rel=0.25), name


def test_regions_stand_in_the_frame_they_are_asked_in():
    plain = find_targets(scene(6.0), spacing_mm=PIXELS)
    moved = find_targets(scene(6.0), spacing_mm=PIXELS, origin_mm=(-50.0, 20.0))
    for one, other in zip(plain.targets, moved.targets, strict=True):
        shift = np.subtract(other.region.center_mm, one.region.center_mm)
        assert shift == pytest.approx([-50.0, 20.0], abs=1e-9)
        assert other.f50 == one.f50


def test_oblong_pixels():
    image = water((160, 100))
    add_rod(image, (30.0, 31.0), 9.0, 100.0, (0.4, 0.7))
    [one] = find_targets(image, spacing_mm=(0.4, 0.7)).targets
    assert one.region.center_mm == pytest.approx((30.0, 31.0), abs=0.02)
    assert one.f50.value == pytest.approx(F50, rel=0.005)


def test_uniform_water_offers_nothing():
    """With 59 slices clean, the rate of false proposals is below 5 % at the 5 % level: 0.95^59."""
    rng = np.random.default_rng(4)
    for index in range(59):
        kernel = HANN if index % 2 else None
        image = np.rint(noise(rng, (96, 96), PIXELS, 12.0, kernel))
        assert find_targets(image, spacing_mm=PIXELS).targets == ()


def test_an_edge_along_the_grid_is_refused():
    image = water(noise=4.0)
    add_block(image, (40.0, 40.0), 30.0, 0.3, 200.0)
    found = find_targets(image, spacing_mm=PIXELS)
    assert found.targets == ()
    assert reasons(found).count("from the pixel grid; at least 1.5° is needed") == 4
    assert "turn the phantom" in found.others[0].why.remedy


def test_a_faint_rod_is_refused_and_told():
    image = water(noise=20.0)
    add_rod(image, (40.0, 40.0), 8.0, 20.0)
    found = find_targets(image, spacing_mm=PIXELS)
    assert found.targets == ()
    assert "contrast is too low" in reasons(found) or "of the circle stand out" in reasons(found)


def test_neighbours_are_refused():
    image = water(noise=4.0)
    add_rod(image, (40.0, 30.0), 8.0, 200.0)
    add_rod(image, (40.0, 48.0), 8.0, 200.0)  # 2 mm between them
    found = find_targets(image, spacing_mm=PIXELS)
    assert found.targets == ()
    assert reasons(found).count("another edge lies") == 2


def test_what_leaves_the_image_is_refused():
    image = water(noise=4.0)
    add_rod(image, (40.0, 75.0), 10.0, 200.0)
    found = find_targets(image, spacing_mm=PIXELS)
    assert found.targets == ()
    assert "leaves the image" in reasons(found)


def test_a_wide_arc_is_no_edge():
    image = water(noise=2.0)
    y, x = grid(image)
    image += 200.0 / (1 + np.exp((np.hypot(y + 60.0, x - 40.0) - 100.0) / 0.4))
    found = find_targets(image, spacing_mm=PIXELS)
    assert found.targets == ()
    assert "curved" in reasons(found)


def test_clipped_values_are_refused():
    image = np.rint(water(noise=8.0))
    add_rod(image, (40.0, 40.0), 9.0, 400.0)
    image = np.minimum(np.rint(image), 300.0)
    found = find_targets(image, spacing_mm=PIXELS, limits=(-1024.0, 300.0))
    assert found.targets == ()
    assert "clipped" in reasons(found)


def test_a_small_rod_is_no_wire():
    image = scene(4.0)
    add_rod(image, (30.0, 75.0), 1.6, 500.0)
    found = find_targets(image, spacing_mm=PIXELS)
    assert len(of_kind(found, "wire")) == 1
    assert of_kind(found, "wire")[0].region.center_mm == pytest.approx((60.2, 70.1), abs=0.1)
    assert "rod" in reasons(found) or "radius" in reasons(found)


def test_the_border_of_the_padding_is_no_edge():
    image = water((200, 200), 5.0)
    add_rod(image, (45.0, 52.0), 9.0, 200.0)
    y, x = grid(image)
    padding = np.hypot(y - 50.0, x - 50.0) > 48.0
    image[padding] = -2000.0
    found = find_targets(image, spacing_mm=PIXELS, padding=padding)
    [one] = found.targets
    assert one.region.center_mm == pytest.approx((45.0, 52.0), abs=0.05)
    assert found.others == ()


def test_only_so_many_are_tried():
    found = find_targets(scene(6.0), spacing_mm=PIXELS, most=2)
    assert len(found.targets) == 2
    assert reasons(found).count("not tried: 2 others") == 4
    everything = find_targets(scene(6.0), spacing_mm=PIXELS)
    assert {one.kind for one in found.targets} <= {one.kind for one in everything.targets}


def test_an_even_slice_and_misuse():
    assert find_targets(np.zeros((64, 64)), spacing_mm=PIXELS).targets == ()
    with pytest.raises(ArgumentError, match="'image' must have shape"):
        find_targets(np.zeros((8, 64)), spacing_mm=PIXELS)
    with pytest.raises(ArgumentError, match="'padding' must have the image's shape"):
        find_targets(np.zeros((64, 64)), spacing_mm=PIXELS, padding=np.zeros((3, 3), bool))
    with pytest.raises(ArgumentError, match="spacing_mm"):
        find_targets(np.zeros((64, 64)), spacing_mm=(0.0, 1.0))


@pytest.mark.parametrize(("contrast", "good"), [(60.0, True), (15.0, False)])
def test_a_rod_that_measures_badly_is_among_the_others(contrast, good):
    """Ten times the noise, and two and a half times: f50 is known to 3 % and to about 13 %."""
    image = water((120, 120), 6.0)
    add_rod(image, (30.0, 29.6), 8.0, contrast)
    found = find_targets(image, spacing_mm=PIXELS)
    assert bool(of_kind(found, "rod")) == good
    assert ("noise leaves" in reasons(found)) != good
