"""A cylinder's field as a smooth picture of what differs from the centre."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from scipy import signal

from ct_measure_plugin.physics.coverage import plane_coverage
from ct_measure_plugin.physics.regions import Disc
from ct_measure_plugin.physics.results import Picture

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.cylinder import Cylinder

    Floats = NDArray[np.float64]

__all__ = ["deviation_map"]

#: Diameter of the disc over which the picture is averaged, mm, and its largest share of the field.
SMOOTH_MM, SMOOTH_SHARE = 10.0, 0.2


def deviation_map(
    planes: list[NDArray[np.generic]],
    found: Cylinder,
    spacing_mm: tuple[float, float],
    field: float,
    centre: float,
    unit: str,
) -> Picture:
    """Return the mean over slices and over small discs, minus the centre's level.

    Parameters
    ----------
    planes : list of ndarray, each of shape (ny, nx)
        The slices.
    found : Cylinder
        Where it lies; a leaning axis moves by whole pixels.
    spacing_mm : (float, float)
        dy and dx.
    field : float
        Share of the radius that is shown; 0 stands outside.
    centre : float
        The level to subtract.
    unit : str
        Of the values.
    """
    reach = field * found.radius_mm
    half = [math.ceil(reach / s) for s in spacing_mm]
    total = np.zeros((2 * half[0] + 1, 2 * half[1] + 1))
    middle = np.rint(found.centers_mm / np.asarray(spacing_mm)).astype(int)
    for plane, (row, column) in zip(planes, middle, strict=True):
        rows = np.clip(np.arange(row - half[0], row + half[0] + 1), 0, plane.shape[0] - 1)
        columns = np.clip(np.arange(column - half[1], column + half[1] + 1), 0, plane.shape[1] - 1)
        total += np.asarray(plane, dtype=float)[np.ix_(rows, columns)] - centre
    total /= len(planes)
    off = (found.centers_mm - middle * np.asarray(spacing_mm)).mean(axis=0)
    y, x = (np.arange(-h, h + 1) * s - o for h, s, o in zip(half, spacing_mm, off, strict=True))
    inside = np.hypot(y[:, None], x[None, :]) <= reach
    kernel = _disc(min(SMOOTH_MM, SMOOTH_SHARE * 2 * reach) / 2, spacing_mm)
    held = signal.fftconvolve(inside.astype(float), kernel, mode="same")
    sums = signal.fftconvolve(np.where(inside, total, 0.0), kernel, mode="same")
    values = np.where(inside, sums / np.where(inside, held, 1.0), 0.0)
    start = middle[0] * np.asarray(spacing_mm)
    origin = (float(start[0] - half[0] * spacing_mm[0]), float(start[1] - half[1] * spacing_mm[1]))
    return Picture(values, spacing_mm, ("y", "x"), ("mm", "mm"), unit, origin)


def _disc(radius_mm: float, spacing_mm: tuple[float, float]) -> Floats:
    half = [max(1, math.ceil(radius_mm / s)) for s in spacing_mm]
    center = (half[0] * spacing_mm[0], half[1] * spacing_mm[1])
    shape = (2 * half[0] + 1, 2 * half[1] + 1)
    found = np.zeros(shape)
    cover = plane_coverage(Disc(center, radius_mm), shape, spacing_mm=spacing_mm)
    found[cover.rows, cover.columns] = cover.weights
    return found
