"""How long a noise map takes, as ratios within one run.

Run it by itself: ``python tests/benchmarks/noise_map.py``. Every ratio is the best of a few
repeats, taken in turns, so that a busy machine slows both sides.
"""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np
from scipy import ndimage

from ct_measure_plugin.physics import local_sd, noise_map

SHAPE, WINDOW = (100, 512, 512), 11


def best(repeats: int, *calls: Callable[[], object]) -> list[float]:
    """Return the best time of each call in seconds, taken in turns."""
    found = [float("inf")] * len(calls)
    for _ in range(repeats):
        for i, call in enumerate(calls):
            begun = time.perf_counter()
            call()
            found[i] = min(found[i], time.perf_counter() - begun)
    return found


if __name__ == "__main__":
    rng = np.random.default_rng(1)
    volume = rng.normal(20, 12, SHAPE).astype(np.float32)
    whole = np.rint(volume).astype(np.int16)

    def twice() -> None:
        ndimage.uniform_filter(volume, (1, WINDOW, WINDOW))
        ndimage.uniform_filter(volume, (1, WINDOW, WINDOW))

    reference, plain, full, stored = best(
        4,
        twice,
        lambda: local_sd(volume, window_px=WINDOW),
        lambda: noise_map(volume, spacing_mm=(0.5, 0.5), window_px=WINDOW),
        lambda: noise_map(whole, spacing_mm=(0.5, 0.5), window_px=WINDOW),
    )
    print(f"uniform_filter twice on 100 × 512 × 512 in single precision: {reference:.2f} s")
    for name, found, limit in (
        ("local SDs", plain, 1.5),
        ("map, histogram and noise level", full, 1.5),
        ("the same from whole numbers", stored, 1.5),
    ):
        ratio = found / reference
        verdict = "met" if ratio <= limit else "MISSED"
        print(f"{name}: {found:.2f} s, ratio {ratio:.2f}, at most {limit} wanted: {verdict}")
