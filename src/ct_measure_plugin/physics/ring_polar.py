"""Slices seen from the rotation centre: means over radial steps and sectors."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.results import NotMeasured

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    Floats = NDArray[np.float64]
    Whole = NDArray[np.intp]

__all__ = ["SECTORS", "Polar", "to_polar"]

#: Sectors of the full circle.
SECTORS = 24

#: Sectors are judged in groups of at least this much arc, so that their noise is independent.
ARC_PIXELS = 8.0

#: Radial steps nearer to the centre hold too few pixels, in steps.
INNERMOST = 8

#: A pixel is no noise if it leaves its step's mean by so many standard deviations, and this share
#: of such pixels is refused.
OUTLYING, OUTLYING_SHARE = 6.0, 0.002


@dataclass(frozen=True, slots=True, eq=False)
class Polar:
    """Slices in polar coordinates.

    Attributes
    ----------
    means : ndarray, shape (slices, steps, sectors)
        Mean of the pixels; 0 where there is none.
    count : ndarray, shape (steps, sectors)
        Number of pixels.
    radius_mm : ndarray, shape (steps,)
        Middle of each radial step.
    step_mm : float
        Its width: the coarser pixel spacing.
    group : ndarray of int, shape (steps,)
        How many neighbouring sectors are judged as one.
    sd : ndarray, shape (steps,)
        SD of the pixels about their sector's mean, over all slices.
    """

    means: Floats
    count: Floats
    radius_mm: Floats
    step_mm: float
    group: Whole
    sd: Floats


def to_polar(
    planes: Sequence[NDArray[np.generic]] | NDArray[np.generic],
    *,
    spacing_mm: tuple[float, float],
    center_mm: tuple[float, float],
    inside: NDArray[np.bool_],
) -> Polar | NotMeasured:
    """Gather the pixels of slices by distance and azimuth.

    Parameters
    ----------
    planes : sequence of ndarray, each of shape (ny, nx)
        The slices.
    spacing_mm : (float, float)
        dy and dx.
    center_mm : (float, float)
        y and x of the rotation centre, from the centre of pixel (0, 0).
    inside : ndarray of bool, shape (ny, nx)
        The pixels of uniform material.

    Notes
    -----
    Each pixel is counted where its centre lies; nothing is interpolated, which would smooth noise
    and rings alike. Azimuths run counter-clockwise on the screen from +x.
    """
    step = max(spacing_mm)
    y = np.arange(inside.shape[0])[:, None] * spacing_mm[0] - center_mm[0]
    x = np.arange(inside.shape[1])[None, :] * spacing_mm[1] - center_mm[1]
    k = np.floor(np.hypot(y, x) / step).astype(np.intp)
    used = inside & (k >= INNERMOST)
    if not used.any():
        return NotMeasured(
            "no pixel of the region lies around the rotation centre",
            "draw the region around it, or give another centre",
        )
    first, last = int(k[used].min()), int(k[used].max())
    steps = last - first + 1
    turn = np.mod(np.arctan2(-y, x) / (2 * np.pi), 1.0)
    # a pixel on a border falls on the same side in every quarter
    sector = ((turn + 1e-9) * SECTORS).astype(np.intp) % SECTORS
    label = ((k - first) * SECTORS + sector)[used]
    count = np.bincount(label, minlength=steps * SECTORS).astype(float)
    means = []
    square = np.zeros(steps * SECTORS)
    for plane in planes:
        values = np.asarray(plane, dtype=float)[used]
        mean = np.bincount(label, values, minlength=steps * SECTORS) / np.maximum(count, 1.0)
        rest = values - mean[label]
        fault = _not_noise(rest, values)
        if fault is not None:
            return fault
        square += np.bincount(label, rest**2, minlength=steps * SECTORS)
        means.append(mean.reshape(steps, SECTORS))
    count = count.reshape(steps, SECTORS)
    freedom = np.maximum(np.sum(np.maximum(count - 1, 0), axis=1) * len(means), 1)
    radius: Floats = (first + np.arange(steps, dtype=np.float64) + 0.5) * float(step)
    arc = 2 * np.pi * radius / step / SECTORS
    group = np.array([next((g for g in (1, 2, 3) if g * a >= ARC_PIXELS), 6) for a in arc])
    sd: Floats = np.sqrt(square.reshape(steps, SECTORS).sum(axis=1) / freedom)
    return Polar(np.array(means), count, radius, step, group.astype(np.intp), sd)


def _not_noise(rest: Floats, values: Floats) -> NotMeasured | None:
    if not np.isfinite(values).all():
        return NotMeasured("the region holds values that are not finite", "choose other slices")
    spread = 1.4826 * float(np.median(np.abs(rest)))
    outside = float(np.mean(np.abs(rest) > OUTLYING * max(spread, 1.0)))
    if outside <= OUTLYING_SHARE:
        return None
    return NotMeasured(
        f"{100 * outside:.2g} % of the pixels are not like their neighbours at the same distance:"
        " inserts, a wall, or an object",
        "choose slices of one material, or a smaller region",
    )
