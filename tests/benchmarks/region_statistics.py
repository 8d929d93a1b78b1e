"""How long labels and live regions take, as ratios within one run.

Run it by itself: ``python tests/benchmarks/region_statistics.py``. Every ratio is the best of a few
repeats, taken in turns, so that a busy machine slows both sides.
"""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np
from skimage.measure import regionprops_table

from ct_measure_plugin.measurements import glance_each, measure_each
from ct_measure_plugin.physics.label_numbers import label_numbers
from ct_measure_plugin.physics.label_statistics import label_statistics
from ct_measure_plugin.physics.regions import Disc
from ct_measure_plugin.physics.volume import Volume

SHAPE = (150, 512, 512)
ASKED = ("label", "intensity_mean", "intensity_std", "intensity_min", "intensity_max", "area")


def noise(shape: tuple[int, int, int]) -> np.ndarray:
    rng = np.random.default_rng(1)
    return np.rint(rng.normal(40, 60, shape)).astype(np.int16)


def fifty_labels() -> np.ndarray:
    """Fifty balls, as an annotation leaves them."""
    labels = np.zeros(SHAPE, np.uint16)
    rng = np.random.default_rng(2)
    ball = np.indices((41, 81, 81)) - np.array([20, 40, 40])[:, None, None, None]
    inside = (ball[0] / 20) ** 2 + (ball[1] / 40) ** 2 + (ball[2] / 40) ** 2 <= 1
    for label in range(1, 51):
        z, y, x = (int(rng.integers(0, n - m)) for n, m in zip(SHAPE, inside.shape, strict=True))
        labels[z : z + 41, y : y + 81, x : x + 81][inside] = label
    return labels


def thousand_labels() -> np.ndarray:
    """A block of 10 × 10 × 10 cells that fills the volume."""
    z, y, x = (np.arange(n) * 10 // n for n in SHAPE)
    return (1 + 100 * z[:, None, None] + 10 * y[None, :, None] + x[None, None, :]).astype(np.uint16)


def best(repeats: int, clock: Callable[[], float], *calls: Callable[[], object]) -> list[float]:
    """Return the best time of each call in seconds, taken in turns."""
    found = [float("inf")] * len(calls)
    for _ in range(repeats):
        for i, call in enumerate(calls):
            begun = clock()
            call()
            found[i] = min(found[i], clock() - begun)
    return found


def labels_against_scikit_image(name: str, labels: np.ndarray, limit: float) -> None:
    values = noise(SHAPE)
    ours, theirs = best(
        3,
        time.perf_counter,
        lambda: label_numbers(values, labels),
        lambda: regionprops_table(labels, values, properties=ASKED),
    )
    ratio = ours / theirs
    verdict = "met" if ratio <= limit else "MISSED"
    print(
        f"{name}: {ours:.2f} s with median, percentiles and higher moments,"
        f" regionprops_table {theirs:.2f} s for mean, SD, min, max, count:"
        f" ratio {ratio:.2f}, at most {limit} wanted: {verdict}"
    )


def table_of_labels() -> None:
    """The same fifty labels with the uncertainties of regions, and with those of pixels."""
    values, labels = noise(SHAPE), fifty_labels()
    spacing = (1.0, 0.7, 0.7)
    region, pixels = best(
        1,
        time.perf_counter,
        lambda: label_statistics(values, labels, spacing_mm=spacing),
        lambda: label_statistics(values, labels, spacing_mm=spacing, noise="independent"),
    )
    print(
        f"50 labels with uncertainties: {region:.1f} s from each label's own noise,"
        f" {pixels:.2f} s for independent pixels"
    )


def live_regions() -> None:
    """Forty discs of 30 px radius on one slice, beside one transform of the slice."""
    volume = Volume(noise((1, 512, 512)), (1.0, 1.0, 1.0))
    rng = np.random.default_rng(3)
    centers = rng.uniform(40, 470, (40, 2))
    discs = [Disc((float(y), float(x)), 30.0, z_mm=0.0) for y, x in centers]
    plane = volume.plane(0).astype(float)
    moving, full, one, transform = best(
        15,
        time.process_time,
        lambda: glance_each("region_statistics", volume, discs),
        lambda: measure_each("region_statistics", volume, discs),
        lambda: measure_each("region_statistics", volume, discs[0]),
        lambda: np.fft.rfft2(plane),
    )
    verdict = "met" if moving < 20e-3 else "MISSED"
    print(
        f"40 regions moving: {1e3 * moving:.1f} ms of processor time, under 20 wanted: {verdict};"
        f" with every uncertainty {1e3 * full:.0f} ms, one such {1e3 * one:.2f} ms;"
        f" a 512 × 512 transform takes {1e3 * transform:.1f} ms"
    )


if __name__ == "__main__":
    labels_against_scikit_image("50 labels in 150 × 512 × 512", fifty_labels(), 0.6)
    table_of_labels()
    labels_against_scikit_image("1,000 labels in 150 × 512 × 512", thousand_labels(), 1.0)
    live_regions()
