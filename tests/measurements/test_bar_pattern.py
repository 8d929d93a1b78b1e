"""Bar groups through the door that plans, docks and scripts use."""

from __future__ import annotations

import numpy as np
import pytest
from examples import EXAMPLES
from truth_images import GAUSS

import ct_measure_plugin as ctm


def test_slices_of_a_box_are_averaged():
    example = EXAMPLES["bar_pattern"]()
    rng = np.random.default_rng(2)
    clean = example.volume.hu.astype(float)
    noisy = clean + rng.normal(0, 30, (6, *clean.shape[1:]))
    volume = ctm.Volume(noisy, example.volume.spacing_mm)
    one = [ctm.regions.Box(r.center_mm, r.size_mm, z_mm=0.0) for r in example.regions]
    single = ctm.measure("bar_pattern", volume, one, frequencies=(0.3, 0.5))
    pooled = ctm.measure("bar_pattern", volume, example.regions, frequencies=(0.3, 0.5))
    assert pooled.noise.value < 0.6 * single.noise.value
    np.testing.assert_allclose(pooled.mtf.y, GAUSS.mtf(pooled.mtf.x), atol=0.03)


def test_missing_frequencies_are_asked_for():
    example = EXAMPLES["bar_pattern"]()
    found = ctm.measure("bar_pattern", example.volume, example.regions, frequencies=(0.3,))
    assert not found
    assert "1 frequencies were entered for 2 groups" in found.reason


def test_fewer_than_three_boxes_are_misuse():
    example = EXAMPLES["bar_pattern"]()
    with pytest.raises(ctm.errors.RegionError, match="at least 3"):
        ctm.measure("bar_pattern", example.volume, example.regions[:2], frequencies=())
