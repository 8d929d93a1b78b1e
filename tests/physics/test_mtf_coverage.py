"""Whether nominal 95 % intervals of f50 and f10 from rods and wires hold the truth."""

from __future__ import annotations

import numpy as np
import pytest
from truth_images import KERNELS, disc_image, disc_profile, noise

from ct_measure_plugin.physics import disc_mtf, wire_mtf
from ct_measure_plugin.physics.results import Quantity

#: Images for each of three kernels, white and CT noise, and two contrasts.
EACH = 20


def rod(rng, kernel, colour, ratio):
    center = tuple(rng.uniform(-0.25, 0.25, 2))
    image = disc_image(kernel, 6.0, shape=(56, 56), center=center)
    image += noise(rng, (56, 56), (0.5, 0.5), 100 / ratio, colour)
    return disc_mtf(image, spacing_mm=(0.5, 0.5))


def wire(rng, kernel, colour, ratio):
    shape, spacing = (60, 60), (0.4, 0.4)
    center = tuple(rng.uniform(-0.2, 0.2, 2))
    spot = disc_image(kernel, 0.1, contrast=1.0, shape=shape, spacing=spacing, center=center)
    spot *= 10 * ratio / disc_profile(kernel, 0.1, np.array([0.0, 0.1]))[0]
    image = spot + noise(rng, shape, spacing, 10, colour)
    return wire_mtf(image, spacing_mm=spacing, object_diameter_mm=0.2)


@pytest.mark.long
@pytest.mark.parametrize(
    ("make", "ratios"), [(rod, (10, 20)), (wire, (30, 80))], ids=["rod", "wire"]
)
def test_nominal_intervals_hold_the_truth(make, ratios):
    rng = np.random.default_rng(2024)
    held: dict[str, list[bool]] = {"f50": [], "f10": []}
    for kernel in KERNELS:
        for colour in (None, kernel):
            for ratio in ratios:
                for _ in range(EACH):
                    found = make(rng, kernel, colour, ratio)
                    for name, level in (("f50", 0.5), ("f10", 0.1)):
                        quantity = getattr(found, name, None)
                        if isinstance(quantity, Quantity):
                            off = abs(quantity.value - kernel.level(level))
                            held[name].append(off <= 1.96 * quantity.uncertainty)
    for name, each in held.items():
        assert len(each) > 0.95 * 12 * EACH, name
        # 240 images: a share of 95 % is known to 1.4 %; 93 to 97 % and two of these
        assert 0.902 < np.mean(each) < 0.998, (name, np.mean(each))
