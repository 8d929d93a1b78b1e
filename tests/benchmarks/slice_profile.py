"""How long a slice profile takes, as a ratio to plain transforms of the same box in one run.

Run it by itself: ``python tests/benchmarks/slice_profile.py``. The processor's own time, the best
of a few repeats taken in turns, so that a busy machine slows both sides less.
"""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np
from scipy import fft

from ct_measure_plugin.physics import slice_profile

PIXEL, LIMIT_S = 0.5, 0.5


def boxes() -> dict[str, tuple[np.ndarray, np.ndarray]]:
    """Return a bead of 29 slices and a ramp of 16, trapezoids 2.5 mm wide, with noise."""
    rng = np.random.default_rng(1)

    def profile(z: np.ndarray) -> np.ndarray:
        return np.clip(1.75 - np.abs(z), 0, 1)

    z = (np.arange(29) - 14) * 0.5
    y, x = (np.mgrid[:41, :41] - 20) * PIXEL
    bead = 500 * profile(z)[:, None, None] * np.exp(-(y**2 + x**2) / 0.6)
    along = (np.arange(80) - 39.5) * PIXEL * np.tan(np.radians(25))
    strip = np.abs(np.arange(60) - 29.5) < 10
    ramp = 300 * profile(along - z[7:23, None])[:, None, :] * strip[:, None]
    return {
        "bead": (bead + rng.normal(0, 12, bead.shape), z),
        "ramp": (ramp + rng.normal(0, 12, ramp.shape), z[7:23]),
    }


def best(repeats: int, *calls: Callable[[], object]) -> list[float]:
    """Return the best processor time of each call in seconds, taken in turns."""
    found = [float("inf")] * len(calls)
    for _ in range(repeats):
        for i, call in enumerate(calls):
            begun = time.process_time()
            call()
            found[i] = min(found[i], time.process_time() - begun)
    return found


if __name__ == "__main__":
    for target, (stack, z) in boxes().items():
        options = {"spacing_mm": (PIXEL, PIXEL), "positions_mm": z, "target": target}
        assert slice_profile(stack, object_size_mm=0.3, in_plane_fwhm_mm=1.0, **options)
        taken, transform = best(
            8,
            lambda s=stack, o=options: slice_profile(
                s, object_size_mm=0.3, in_plane_fwhm_mm=1.0, **o
            ),
            lambda s=stack: fft.rfftn(s),
        )
        verdict = "met" if taken <= LIMIT_S else "MISSED"
        print(
            f"{target}, {' × '.join(map(str, stack.shape))}: {1000 * taken:.0f} ms,"
            f" {taken / transform:.0f} × one transform of the box; at most"
            f" {1000 * LIMIT_S:.0f} ms wanted: {verdict}"
        )
