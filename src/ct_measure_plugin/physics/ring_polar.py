"""Slices seen from the rotation centre: means over radial steps and sectors."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import ndimage

from ct_measure_plugin.physics.results import NotMeasured

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    Floats = NDArray[np.float64]
    Flags = NDArray[np.bool_]
    Whole = NDArray[np.intp]

__all__ = ["SECTORS", "STEPS_PER_PIXEL", "Polar", "Sight", "fault", "to_polar"]

#: Sectors of the full circle.
SECTORS = 24

#: Radial steps of a pixel: a ring between two steps of a whole pixel would lose a seventh.
STEPS_PER_PIXEL = 2

#: Sectors are judged in groups of at least this much arc, so that their noise is independent.
ARC_PIXELS = 8.0

#: Nearer to the centre than this there are too few pixels, in pixels.
INNERMOST = 8

#: Cells of which less than this share lies in the region are left out.
LEAST_HELD = 0.5

#: A pixel is no noise if it leaves its surroundings' mean by so many standard deviations, and this
#: share of such pixels is refused.
OUTLYING, OUTLYING_SHARE = 6.0, 0.002

#: The pixels of a ring may scatter by so many times as much as all: within a step, it is steep.
STRONGEST = 10.0


@dataclass(frozen=True, slots=True, eq=False)
class Polar:
    """An image in polar coordinates.

    Attributes
    ----------
    means : ndarray, shape (steps, sectors)
        Mean over each cell; 0 where there is none.
    count : ndarray, shape (steps, sectors)
        Its area in pixels.
    radius_mm : ndarray, shape (steps,)
        Middle of each radial step.
    step_mm : float
        Its width: half of the coarser pixel spacing.
    group : ndarray of int, shape (steps,)
        How many neighbouring sectors are judged as one.
    """

    means: Floats
    count: Floats
    radius_mm: Floats
    step_mm: float
    group: Whole

    @property
    def arc(self) -> Floats:
        """Return the length of a sector in pixels, shape (steps,)."""
        found: Floats = 2 * np.pi * self.radius_mm / (STEPS_PER_PIXEL * self.step_mm) / SECTORS
        return found


class Sight:
    """Where the samples of an image lie, seen from a rotation centre.

    Parameters
    ----------
    inside : ndarray of bool, shape (ny, nx)
        The pixels of uniform material.
    spacing_mm : (float, float)
        dy and dx.
    center_mm : (float, float)
        y and x of the rotation centre, from the centre of pixel (0, 0).

    Notes
    -----
    Samples lie half a pixel apart along the radius, a pixel or less along the arc, and are read by
    cubic splines: a spline takes little from what a pixel grid can hold, and what it takes the
    whitening of the search gives back. Azimuths run counter-clockwise on the screen from +x.
    """

    def __init__(
        self, inside: Flags, spacing_mm: tuple[float, float], center_mm: tuple[float, float]
    ) -> None:
        self.inside, self.spacing_mm, self.center_mm = inside, spacing_mm, center_mm
        self.step_mm = max(spacing_mm) / STEPS_PER_PIXEL
        y = np.arange(inside.shape[0])[:, None] * spacing_mm[0] - center_mm[0]
        x = np.arange(inside.shape[1])[None, :] * spacing_mm[1] - center_mm[1]
        r = np.hypot(y, x)[inside] / self.step_mm
        r = r[r >= INNERMOST * STEPS_PER_PIXEL]
        self.first = int(r.min()) if len(r) else 0
        self.steps = int(r.max()) - self.first + 1 if len(r) else 0
        around = 2 * np.pi * (self.first + self.steps) / STEPS_PER_PIXEL / SECTORS
        self.samples = max(4, int(np.ceil(around)))
        self.radius_mm: Floats = (self.first + np.arange(self.steps, dtype=float) + 0.5) * (
            self.step_mm
        )
        self.held, self.count = self._cells()

    def _places(self, rows: Whole) -> Floats:
        number = SECTORS * self.samples
        turn = 2 * np.pi * (np.arange(number) + 0.5) / number
        r = self.radius_mm[rows][:, None]
        return np.stack(
            [
                (self.center_mm[0] - r * np.sin(turn)) / self.spacing_mm[0],
                (self.center_mm[1] + r * np.cos(turn)) / self.spacing_mm[1],
            ]
        )

    def _cells(self) -> tuple[Flags, Floats]:
        """Return which samples lie on pixels of the region, and the cells' areas in pixels."""
        every = np.arange(self.steps, dtype=np.intp)
        held = ndimage.map_coordinates(
            self.inside.astype(np.uint8), self._places(every), order=0, mode="constant", cval=0
        )
        held = held.reshape(self.steps, SECTORS, self.samples) > 0
        share = held.mean(axis=2)
        area = 2 * np.pi * self.radius_mm * self.step_mm / SECTORS / np.prod(self.spacing_mm)
        count: Floats = np.where(share >= LEAST_HELD, share, 0.0) * area[:, None]
        return held, count

    def means(self, image: NDArray[np.generic], rows: Whole | None = None) -> Floats:
        """Return the means over the cells of some steps, or of all, shape (steps, sectors)."""
        rows = np.arange(self.steps, dtype=np.intp) if rows is None else rows
        values = np.asarray(image, dtype=float)
        values = np.where(self.inside, values, np.median(values[self.inside]))
        read = ndimage.map_coordinates(values, self._places(rows), order=3, mode="mirror")
        held = self.held[rows]
        total = np.sum(read.reshape(held.shape) * held, axis=2)
        found: Floats = np.where(self.count[rows] > 0, total / np.maximum(held.sum(axis=2), 1), 0.0)
        return found

    def spread(self, values: Floats) -> tuple[Floats, tuple[float, float]]:
        """Return cells' values as an image of the region's bounding box, and where it begins, mm.

        Values run straight between steps; 0 outside the region.
        """
        rows, columns = (np.flatnonzero(self.inside.any(axis=k)) for k in (1, 0))
        y, x = (
            np.arange(k[0], k[-1] + 1) * s - c
            for k, s, c in zip((rows, columns), self.spacing_mm, self.center_mm, strict=True)
        )
        turn = np.mod(np.arctan2(-y[:, None], x[None, :]) / (2 * np.pi), 1.0)
        sector = (turn * SECTORS).astype(np.intp) % SECTORS
        r = np.hypot(y[:, None], x[None, :])
        found = np.zeros(r.shape)
        for k in range(SECTORS):
            at = sector == k
            found[at] = np.interp(r[at], self.radius_mm, values[:, k], left=0.0, right=0.0)
        within = self.inside[rows[0] : rows[-1] + 1, columns[0] : columns[-1] + 1]
        origin = (float(rows[0] * self.spacing_mm[0]), float(columns[0] * self.spacing_mm[1]))
        return np.where(within, found, 0.0), origin


def to_polar(image: NDArray[np.generic], sight: Sight) -> Polar | NotMeasured:
    """Return an image in polar coordinates; NotMeasured if none of it lies around the centre."""
    if not sight.steps:
        return NotMeasured(
            "no pixel of the region lies around the rotation centre",
            "draw the region around it, or give another centre",
        )
    polar = Polar(
        sight.means(image),
        sight.count,
        sight.radius_mm,
        sight.step_mm,
        np.ones(sight.steps, dtype=np.intp),
    )
    group = [next((g for g in (1, 2, 3) if g * a >= ARC_PIXELS), 6) for a in polar.arc]
    polar.group[:] = group
    return polar


def fault(
    planes: Sequence[NDArray[np.generic]] | NDArray[np.generic], sight: Sight
) -> NotMeasured | None:
    """Tell what in the slices is not noise of one material, if anything."""
    y, x = (
        (np.arange(n) * s - c)
        for n, s, c in zip(sight.inside.shape, sight.spacing_mm, sight.center_mm, strict=True)
    )
    width = 2 * sight.step_mm
    k = np.floor(np.hypot(y[:, None], x[None, :]) / width).astype(np.intp)[sight.inside]
    turn = np.mod(np.arctan2(-y[:, None], x[None, :]) / (2 * np.pi), 1.0)[sight.inside]
    label = k * SECTORS + (turn * SECTORS).astype(np.intp) % SECTORS
    count = np.maximum(np.bincount(label), 1)
    for plane in planes:
        values = np.asarray(plane, dtype=float)[sight.inside]
        if not np.isfinite(values).all():
            return NotMeasured("the region holds values that are not finite", "choose other slices")
        if values.size and np.ptp(values) == 0:
            return NotMeasured(
                "a slice holds one value only, no noise to tell rings from",
                "choose slices that were not made up",
            )
        rest = values - (np.bincount(label, values) / count)[label]
        outside = float(np.mean(np.abs(rest) > OUTLYING * _spread(np.abs(rest), k)))
        if outside > OUTLYING_SHARE:
            return NotMeasured(
                f"{100 * outside:.2g} % of the pixels are not like their neighbours at the same"
                " distance: inserts, a wall, or an object",
                "choose slices of one material, or a smaller region",
            )
    return None


def _spread(rest: Floats, step: Whole) -> Floats:
    """Return the SD to expect of every pixel: of all, or of its own circle if that is a ring."""
    whole = max(1.4826 * float(np.median(rest)), 1.0)
    order = np.lexsort((rest, step))
    kinds, begin, count = np.unique(step[order], return_index=True, return_counts=True)
    own = np.full(int(kinds[-1]) + 1, whole)
    own[kinds] = 1.4826 * rest[order][begin + count // 2]
    found: Floats = np.clip(own, whole, STRONGEST * whole)[step]
    return found
