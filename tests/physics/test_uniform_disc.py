"""The disc proposed for the noise: as large as it can be, and clear of everything."""

from __future__ import annotations

import numpy as np
import pytest
from noise_fields import SPECTRA, field

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.uniform_disc import uniform_disc

SPACING = (0.6, 0.5)


def scene(name: str, seed: int, rod: float = 150.0):
    """Water of 40 mm radius in air, a rod of 5 mm at (25, 0) mm; noise of a known texture."""
    y, x = np.mgrid[:192, :192] * np.array(SPACING)[:, None, None]
    y, x = y - 57, x - 48
    clean = np.where(np.hypot(y, x) < 40, 0.0, -1000.0)
    clean[np.hypot(y - 25, x) < 5] = rod
    noise = field(np.random.default_rng(seed), (256, 256), SPACING, SPECTRA[name])[:192, :192]
    return clean + noise


@pytest.mark.parametrize("name", SPECTRA)
@pytest.mark.parametrize("rod", [150.0, -90.0])
def test_it_is_clear_of_border_and_rod_and_nearly_as_large_as_can_be(name, rod):
    """Between border and rod fits a circle of 30 mm, centred 10 mm off: (40 + 20)/2. A window of
    9 pixels keeps half its diagonal, 3.5 mm, off both; chance costs a little more."""
    image = scene(name, 3, rod)
    found = uniform_disc(lambda _: image, 1, 0, spacing_mm=SPACING, least_mm=5)
    y, x = found.center[0] * SPACING[0] - 57, found.center[1] * SPACING[1] - 48
    assert np.hypot(y, x) + found.radius_mm < 40
    assert np.hypot(y - 25, x) - found.radius_mm > 5
    assert found.radius_mm > 23


def test_it_reaches_over_the_slices_that_are_alike():
    """Another material, a rod within the disc, or air end it."""
    plain = [scene("ramp", k) for k in range(7)]
    plain[1][60:90, 70:100] += 150
    plain[5] += np.where(plain[5] > -500, 60.0, 0.0)
    found = uniform_disc(lambda k: plain[k], 7, 3, spacing_mm=SPACING, least_mm=5)
    assert (found.first, found.last) == (2, 4)


def test_what_holds_no_uniform_material_is_told():
    rng = np.random.default_rng(1)
    air = rng.normal(-1000, 10, (96, 96))
    refused = uniform_disc(lambda _: air, 1, 0, spacing_mm=SPACING, least_mm=5)
    assert isinstance(refused, NotMeasured)
    assert "too little material" in refused.reason
    image = scene("white", 2)
    small = uniform_disc(lambda _: image, 1, 0, spacing_mm=SPACING, least_mm=39)
    assert "need 39.0 mm" in small.reason
    flat = np.zeros((96, 96))
    assert not uniform_disc(lambda _: flat, 1, 0, spacing_mm=SPACING, least_mm=5)
    with pytest.raises(ArgumentError, match="'index' must lie within 0 to 0"):
        uniform_disc(lambda _: image, 1, 1, spacing_mm=SPACING, least_mm=5)
