"""A slice of 512 × 512 pixels from 720 views: seconds, and the ratio to scikit-image's iradon.

Run it by itself: ``python tests/benchmarks/virtual_scanner.py``. Both reconstruct the same
projections of the bench phantom's rods on the same grid, in turns; the best of a few repeats
counts, since other work only ever adds. iradon has one thread and interpolates linearly, as the
"linear" lookup does; "fine" is the default and looks up samples eight times denser. The whole
slice is what a user waits for: line integrals, quanta, reconstruction, CT numbers. Aimed at: no
more than iradon's time, and 3 s for the whole slice, on two cores.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import replace

import numpy as np
from skimage.transform import iradon

from ct_measure_plugin.virtual_scanner import (
    Detector,
    Grid,
    Kernel,
    ParallelBeam,
    Recipe,
    reconstruct,
    simulate_slice,
)
from ct_measure_plugin.virtual_scanner.bench_phantom import bench_phantom
from ct_measure_plugin.virtual_scanner.scanner import measured_projection

PIXELS, VIEWS, REPEATS = 512, 720, 4
RECIPE = Recipe(
    phantom=bench_phantom(),
    geometry=ParallelBeam(views=VIEWS, channels=PIXELS, pitch_mm=0.25),
    detector=Detector(quanta_per_mm2=1e5),
    kernel=Kernel("ramp", 2.0),
    grid=Grid(matrix=PIXELS, fov_mm=0.25 * PIXELS, lookup="linear"),
    positions_mm=(31.25,),
)


def ways() -> dict[str, Callable[[], object]]:
    """Return what is timed, by name."""
    values, _ = measured_projection(RECIPE, 0)
    degrees = np.degrees(RECIPE.geometry.angles)
    fine = replace(RECIPE.grid, lookup="fine")

    def ours(grid: Grid, workers: int) -> Callable[[], object]:
        return lambda: reconstruct(values, RECIPE.geometry, RECIPE.kernel, grid, workers=workers)

    return {
        "iradon": lambda: iradon(values.T, theta=degrees, filter_name="ramp", circle=True),
        "reconstruct, linear, two threads": ours(RECIPE.grid, 2),
        "reconstruct, linear, one thread": ours(RECIPE.grid, 1),
        "reconstruct, fine, two threads": ours(fine, 2),
        "whole slice, fine, two threads": lambda: simulate_slice(replace(RECIPE, grid=fine), 0),
    }


def main() -> None:
    """Print the figures."""
    calls = ways()
    best = dict.fromkeys(calls, float("inf"))
    for _ in range(REPEATS):
        for name, call in calls.items():
            begun = time.perf_counter()
            call()
            best[name] = min(best[name], time.perf_counter() - begun)
    for name, seconds in best.items():
        print(f"{name:34s} {seconds:6.2f} s   {seconds / best['iradon']:5.2f} × iradon")


if __name__ == "__main__":
    main()
