"""The largest disc of uniform material on a slice, and over which slices it stays uniform."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import ndimage

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.local_sd import LocalSd
from ct_measure_plugin.physics.noise_mode import Bins, mode_of
from ct_measure_plugin.physics.results import NotMeasured

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    Floats = NDArray[np.float64]
    Flags = NDArray[np.bool_]

__all__ = ["UniformDisc", "uniform_disc"]

#: Side of the windows in which mean and SD are looked at, pixels.
WINDOW_PX = 9

#: A window is not uniform if its SD exceeds the most frequent one by this factor, or its mean lies
#: so many robust SDs of the means from their median.
LOUD, FAR = 1.5, 5.0

#: Windows that are loud by chance form spots smaller than the window, and less loud than this.
CHANCE = 2.2

#: Material counts from this value on: above air and lung (a choice).
DENSE_HU = -300.0

#: Share of the slice that dense material must fill, and windows that a histogram needs.
LEAST_WINDOWS = 400

#: Off the middle of the image a disc is taken only if its radius is larger by this share of the
#: distance: discs of nearly one size lie where the noise is most alike.
PULL = 0.02


@dataclass(frozen=True, slots=True)
class UniformDisc:
    """A disc of one material.

    Attributes
    ----------
    center : (float, float)
        Row and column.
    radius_mm : float
        Of the disc.
    first, last : int
        Slices over which it stays uniform, both included.
    """

    center: tuple[float, float]
    radius_mm: float
    first: int
    last: int


def uniform_disc(
    plane: Callable[[int], NDArray[np.generic]],
    slices: int,
    index: int,
    *,
    spacing_mm: tuple[float, float],
    least_mm: float,
    most_slices: int = 40,
) -> UniformDisc | NotMeasured:
    """Return the largest disc of uniform material on a slice, for its noise to be measured.

    Parameters
    ----------
    plane : callable
        Gives the values of a slice, shape (ny, nx).
    slices, index : int
        How many slices there are, and which one is looked at.
    spacing_mm : (float, float)
        dy and dx.
    least_mm : float
        Smallest radius that is of use.
    most_slices : int
        No more slices than so many to either side are looked at.

    Returns
    -------
    UniformDisc or NotMeasured
        NotMeasured if no such disc of the least radius is there.

    Raises
    ------
    ArgumentError
        If there is no such slice.

    Notes
    -----
    Every pixel around which a window's SD is far above the most frequent one, or whose mean is far
    from the others', is left out; what is left is searched for the largest circle that fits (by
    the distance to the nearest pixel left out). Objects whose contrast is below the noise may be
    missed: the measurement of the noise itself refuses those that matter.

    Examples
    --------
    >>> y, x = np.mgrid[:128, :128]
    >>> water = np.where(np.hypot(y - 64, x - 60) < 50, 0.0, -1000.0)
    >>> water[60:70, 20:30] = 200.0
    >>> noise = np.random.default_rng(1).normal(0, 10, (3, 128, 128))
    >>> scan = [water + one for one in noise]
    >>> found = uniform_disc(lambda k: scan[k], 3, 1, spacing_mm=(1.0, 1.0), least_mm=10)
    >>> found.first, found.last, 30 < found.radius_mm < 42
    (0, 2, True)
    """
    if not 0 <= index < slices:
        raise ArgumentError("index", f"must lie within 0 to {slices - 1}", index)
    image = np.asarray(plane(index))
    fits = _uniform(image)
    if fits is None:
        return NotMeasured(
            "the slice holds too little material denser than lung",
            "go to a slice through uniform material",
        )
    distance = ndimage.distance_transform_edt(np.pad(fits, 1), sampling=spacing_mm)[1:-1, 1:-1]
    rows, columns = (np.arange(n) - (n - 1) / 2 for n in image.shape)
    off = np.hypot(rows[:, None] * spacing_mm[0], columns[None, :] * spacing_mm[1])
    row, column = np.unravel_index(int(np.argmax(distance - PULL * off)), image.shape)
    radius = float(distance[row, column]) - max(spacing_mm)
    if radius < least_mm:
        return NotMeasured(
            f"the largest uniform disc on the slice has a radius of {max(radius, 0.0):.1f} mm;"
            f" patches of this size need {least_mm:.1f} mm",
            "take smaller patches, or a slice through more uniform material",
        )
    y, x = (np.arange(n) for n in image.shape)
    inside = (
        np.hypot((y[:, None] - row) * spacing_mm[0], (x[None, :] - column) * spacing_mm[1]) < radius
    )
    level = float(image[inside].mean())
    first = last = index
    for step in (-1, 1):
        k = index
        while 0 <= k + step < slices and abs(k + step - index) <= most_slices:
            k += step
            if not _as_uniform(np.asarray(plane(k)), inside, level):
                break
            first, last = min(first, k), max(last, k)
    return UniformDisc((float(row), float(column)), radius, first, last)


def _as_uniform(image: NDArray[np.generic], inside: Flags, level: float) -> bool:
    """Tell whether another slice is uniform within the disc, and of the same material."""
    fits = _uniform(image)
    if fits is None or not fits[inside].all():
        return False
    values = image[inside]
    return abs(float(values.mean()) - level) < float(values.std())


def _uniform(image: NDArray[np.generic]) -> Flags | None:
    """Return around which pixels the material is uniform; None if there is hardly any."""
    half = WINDOW_PX // 2
    if min(image.shape) < 2 * WINDOW_PX or not np.isfinite(image).all():
        return None
    mean, sd = LocalSd((image.shape[0], image.shape[1]), WINDOW_PX).of(image, 0.0)
    whole = np.zeros(image.shape, bool)
    whole[half:-half, half:-half] = True
    dense = whole & (mean > DENSE_HU)
    if int(dense.sum()) < LEAST_WINDOWS:
        return None
    quiet = _most_frequent(sd[dense])
    if not quiet > 0:
        return None
    loud = sd > LOUD * quiet
    calm = dense & ~loud
    if not calm.any():
        return None
    middle = float(np.median(mean[calm]))
    spread = 1.4826 * float(np.median(np.abs(mean[calm] - middle)))
    # between materials the spread is theirs; within one it is the noise's
    far = np.abs(mean - middle) > FAR * max(spread, quiet / WINDOW_PX)
    found: Flags = dense & ~_without_chance(loud, sd, CHANCE * quiet) & ~far
    return found


def _most_frequent(sd: NDArray[np.float32]) -> float:
    middle = float(np.median(sd))
    if middle <= 0:
        return 0.0
    bins = Bins.around(middle)
    counts, _ = np.histogram(sd, bins.count, (0.0, bins.count * bins.width))
    return float(mode_of(counts[None].astype(float), bins, 1).value) if counts.any() else 0.0


def _without_chance(loud: Flags, sd: NDArray[np.float32], limit: float) -> Flags:
    """Return the loud windows without the spots that chance makes."""
    labels, count = ndimage.label(loud)
    if not count:
        return loud
    numbers = np.arange(1, count + 1)
    size = ndimage.sum_labels(loud, labels, numbers)
    highest = ndimage.maximum(sd, labels, numbers)
    real = np.concatenate([[False], (size >= WINDOW_PX**2) | (np.asarray(highest) > limit)])
    found: Flags = real[labels]
    return found


def least_radius(side_mm: float) -> float:
    """Return the radius of a disc that holds a square patch.

    >>> round(least_radius(10.0), 2)
    7.07
    """
    return side_mm / math.sqrt(2.0)
