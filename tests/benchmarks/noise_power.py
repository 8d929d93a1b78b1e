"""How long the noise power spectrum takes, as ratios within one run.

Run it by itself: ``python tests/benchmarks/noise_power.py``. Every ratio is the best of a few
repeats, taken in turns, so that a busy machine slows both sides.
"""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np
from scipy import fft

from ct_measure_plugin.physics import noise_power

SPACING = (0.5, 0.5)


def best(repeats: int, *calls: Callable[[], object]) -> list[float]:
    """Return the best time of each call in seconds, taken in turns."""
    found = [float("inf")] * len(calls)
    for _ in range(repeats):
        for i, call in enumerate(calls):
            begun = time.perf_counter()
            call()
            found[i] = min(found[i], time.perf_counter() - begun)
    return found


def spectrum_against_the_transform_alone(title: str, limit: float | None, **more: object) -> None:
    """2,000 patches of 64 × 64 in double precision, quadratic detrending, Hann window."""
    patches = np.random.default_rng(1).normal(0, 10, (2000, 64, 64))
    ours, alone = best(
        7, lambda: noise_power(patches, spacing_mm=SPACING, **more), lambda: fft.rfft2(patches)
    )
    ratio = ours / alone
    verdict = (
        ""
        if limit is None
        else f", at most {limit} wanted: " + ("met" if ratio <= limit else "MISSED")
    )
    print(
        f"{title}: {1e3 * ours:.0f} ms, rfft2 alone {1e3 * alone:.0f} ms:"
        f" ratio {ratio:.2f}{verdict}"
    )


if __name__ == "__main__":
    rows = np.arange(2000)
    placed = np.stack([np.zeros(2000, int), 64 * (rows // 45), 64 * (rows % 45)], axis=1)
    spectrum_against_the_transform_alone("2,000 patches, one slice", 5.0, corners=placed)
    spectrum_against_the_transform_alone("the same, without their places", 5.0)
    stacked = np.stack([rows // 20, 64 * (rows % 20 // 5), 64 * (rows % 5)], axis=1)
    spectrum_against_the_transform_alone("the same, 20 in each of 100 slices", 5.0, corners=stacked)
