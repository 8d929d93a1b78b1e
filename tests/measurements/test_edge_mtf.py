"""The edge MTF through the door that plans, docks and scripts use."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from truth_images import GAUSS, HANN, edge_image

import ct_measure_plugin as ctm

SAMPLES = Path(__file__).parents[2] / "sample_volumes"


def box_volume(stack) -> ctm.Volume:
    return ctm.Volume(np.asarray(stack), (2.0, 0.5, 0.5), origin_mm=(0.0, -40.0, 7.0))


def test_the_found_edge_is_given_in_the_image_frame():
    image = edge_image(GAUSS, angle=5, shape=(60, 60))
    volume = box_volume(image[None])
    found = ctm.measure("edge_mtf", volume, ctm.regions.Box((-25.25, 21.75), (28.0, 28.0)))
    for y, x in found.ends_mm:
        # the middle of the image lies at (-25.25, 21.75)
        off = np.cos(np.radians(5)) * (x - 21.75) + np.sin(np.radians(5)) * (y + 25.25)
        assert off == pytest.approx(0.0, abs=1e-3)


def test_slices_are_averaged():
    """Four slices of independent noise halve the uncertainty."""
    rng = np.random.default_rng(3)
    stack = edge_image(HANN)[None] + rng.normal(0, 4, (4, 64, 64))
    volume = box_volume(stack)
    box = ctm.regions.Box((-24.25, 22.75), (40.0, 40.0))
    one = ctm.measure("edge_mtf", volume, ctm.regions.Box((-24.25, 22.75), (40, 40), z_mm=0.0))
    four = ctm.measure("edge_mtf", volume, box)
    # the shapes allowed grow as noise falls, so that the gain is less than the square root
    assert 0.4 < four.f50.uncertainty / one.f50.uncertainty < 0.75
    assert abs(four.f50.value - 0.4) < 3 * four.f50.uncertainty


def test_an_edge_that_moves_is_cautioned_then_refused():
    shifts = np.arange(5) - 2.0
    slow = np.stack([edge_image(GAUSS, shift=0.1 * s) for s in shifts])
    found = ctm.measure("edge_mtf", box_volume(slow), ctm.regions.Box((-24.25, 22.75), (40, 40)))
    assert "leaning-object" in {c.code for c in found.cautions}
    # five positions 0.1 mm apart have the variance 0.02 mm²: sigma 0.6 becomes 0.6164
    assert found.f50.value == pytest.approx(0.187391 / np.sqrt(0.36 + 0.02), rel=2e-3)
    fast = np.stack([edge_image(GAUSS, shift=0.3 * s) for s in shifts])
    found = ctm.measure("edge_mtf", box_volume(fast), ctm.regions.Box((-24.25, 22.75), (40, 40)))
    assert not found
    assert "moves" in found.reason


def test_a_slice_without_the_edge_is_refused():
    stack = np.stack([edge_image(GAUSS), edge_image(GAUSS), np.full((64, 64), 50.0)])
    found = ctm.measure("edge_mtf", box_volume(stack), ctm.regions.Box((-24.25, 22.75), (40, 40)))
    assert not found
    assert "do not hold the same edge" in found.reason


@pytest.mark.parametrize(
    ("series", "f50", "f10"), [("standard", 0.4683, 0.7653), ("sharp", 0.7496, 0.8995)]
)
def test_the_sample_volumes_give_their_truth(series, f50, f10):
    """Truth table of sample_volumes/README.md: to 0.01 of the MTF's value."""
    volume = ctm.read_series(SAMPLES / series)
    # the left edge of the PTFE block, which leans 3°
    box = ctm.regions.Box((24.0, 14.0), (14.0, 14.0), z_mm=(21.0, 26.5))
    found = ctm.measure("edge_mtf", volume, box)
    for name, truth, level in (("f50", f50, 0.5), ("f10", f10, 0.1)):
        got = getattr(found, name)
        i = int(np.searchsorted(-found.mtf.y, -level))
        slope = abs(found.mtf.y[i + 1] - found.mtf.y[i - 1]) / (
            found.mtf.x[i + 1] - found.mtf.x[i - 1]
        )
        assert abs(got.value - truth) < 0.01 / slope + 3 * got.uncertainty


def test_further_levels_are_given():
    volume = box_volume(edge_image(GAUSS)[None])
    found = ctm.measure(
        "edge_mtf", volume, ctm.regions.Box((-24.25, 22.75), (40, 40)), levels=(0.8, 0.2)
    )
    np.testing.assert_array_equal(found.levels.x, [0.2, 0.8])
    sigma = 0.6
    truth = np.sqrt(np.log(1 / np.array([0.2, 0.8])) / 2) / (np.pi * sigma)
    np.testing.assert_allclose(found.levels.y, truth, rtol=5e-3)
    with pytest.raises(ctm.errors.ArgumentError, match="'levels' must lie between 0 and 1"):
        ctm.measure("edge_mtf", volume, ctm.regions.Box((-24.25, 22.75), (40, 40)), levels=(50.0,))


def test_clipping_is_seen_in_single_slices():
    """The mean of clipped slices hides the clipping."""
    rng = np.random.default_rng(2)
    stack = edge_image(GAUSS, contrast=1000)[None] + rng.normal(0, 30, (4, 64, 64))
    clipped = ctm.Volume(np.minimum(stack, 1010), (2.0, 0.5, 0.5), representable_hu=(-1024, 1010))
    found = ctm.measure("edge_mtf", clipped, ctm.regions.Box((15.75, 15.75), (40, 40)))
    assert not found
    assert "clipped" in found.reason
