"""Whole pixels of an upright box out of a Volume, slice by slice."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, TypeVar

import numpy as np

from ct_measure_plugin.physics.coverage import slices_of
from ct_measure_plugin.physics.regions import Box, Disc, Region
from ct_measure_plugin.physics.results import Caution, NotMeasured, Result

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.volume import Volume

__all__ = ["Boxed", "cut_box"]


_Answer = TypeVar("_Answer", bound=Result | NotMeasured)


@dataclass(frozen=True, slots=True, eq=False)
class Boxed:
    """The pixels of a box.

    Attributes
    ----------
    values : ndarray, shape (nz, ny, nx)
        CT numbers.
    slices : list of int
        Indices of the slices.
    origin_mm : (float, float)
        y and x of the centre of pixel (0, 0) of the box, in the image frame.
    cautions : tuple of Caution
        The volume's, and what was left out here.
    """

    values: NDArray[np.float64]
    slices: list[int]
    origin_mm: tuple[float, float]
    cautions: tuple[Caution, ...]

    def told(self, found: _Answer) -> _Answer:
        """Return an answer about these pixels with what is to be known of them."""
        return replace(found, cautions=(*self.cautions, *found.cautions))

    def shifted(self, place_mm: tuple[float, float]) -> tuple[float, float]:
        """Return a place in the box, y and x, as a place in the image frame."""
        (y, x), (oy, ox) = place_mm, self.origin_mm
        return y + oy, x + ox


def cut_box(volume: Volume, region: Region, *, least: int) -> Boxed | NotMeasured:
    """Return the pixels whose centres lie in a region's box.

    The box of a Disc is the square around it; that of a turned Box is the largest upright one
    inside it. NotMeasured if fewer than `least` pixels a side are left, or padding lies inside.
    """
    slices = slices_of(region, volume)
    (cy, cx), (height, width) = _upright(region)
    spans = [
        _span(middle - size / 2, middle + size / 2, step, origin, count)
        for middle, size, step, origin, count in (
            (cy, height, volume.spacing_mm[1], volume.origin_mm[1], volume.shape[1]),
            (cx, width, volume.spacing_mm[2], volume.origin_mm[2], volume.shape[2]),
        )
    ]
    (rows, above), (columns, beside) = spans
    ny, nx = rows.stop - rows.start, columns.stop - columns.start
    if not slices or ny <= 0 or nx <= 0:
        return NotMeasured(
            "the region lies outside the volume", "move it onto the image", volume.cautions
        )
    if min(ny, nx) < least:
        return NotMeasured(
            f"the box holds {ny} by {nx} pixels; at least {least} by {least} are needed",
            "draw it larger",
            volume.cautions,
        )
    planes = []
    for k in slices:
        plane = np.asarray(volume.hu[k, rows, columns])
        padding = volume.padding(k, plane)
        if padding is not None and padding.any():
            return NotMeasured(
                f"{int(padding.sum())} pixels of the box are padding",
                "draw it within the reconstructed circle",
                volume.cautions,
            )
        if not np.isfinite(plane).all():
            return NotMeasured(
                "pixels of the box hold no finite number", "draw it elsewhere", volume.cautions
            )
        planes.append(plane)
    cautions = list(volume.cautions)
    if above or beside:
        cautions.append(
            Caution(
                "outside-image",
                "Part of the box lies outside the image and was left out.",
                "Move the box onto the image.",
            )
        )
    return Boxed(
        np.asarray(planes, dtype=float),
        slices,
        (
            volume.origin_mm[1] + rows.start * volume.spacing_mm[1],
            volume.origin_mm[2] + columns.start * volume.spacing_mm[2],
        ),
        tuple(cautions),
    )


def _span(low: float, high: float, step: float, origin: float, count: int) -> tuple[slice, bool]:
    """Return the pixels with centres in [low, high] and whether some lie outside the image."""
    first = math.ceil((low - origin) / step - 1e-6)
    last = math.floor((high - origin) / step + 1e-6)
    return slice(max(first, 0), min(last + 1, count)), first < 0 or last >= count


def _upright(region: Region) -> tuple[tuple[float, float], tuple[float, float]]:
    """Return centre and size (y, x) of the upright box of a Disc or Box."""
    if isinstance(region, Disc):
        return region.center_mm, (2 * region.radius_mm, 2 * region.radius_mm)
    if not isinstance(region, Box):
        raise TypeError(region.kind)
    h, w = region.size_mm
    turn = math.radians(region.angle_deg)
    sin, cos = abs(math.sin(turn)), abs(math.cos(turn))
    if sin < 1e-9 or cos < 1e-9:
        return region.center_mm, (h, w) if sin < 1e-9 else (w, h)
    # all corners (p, q) of the upright box must satisfy p cos + q sin <= w, p sin + q cos <= h
    long, short = max(w, h), min(w, h)
    if short <= 2 * sin * cos * long or abs(sin - cos) < 1e-9:
        # two opposite corners touch the long sides at half their height
        p, q = short / 2 / sin, short / 2 / cos
        wide, high = (p, q) if w >= h else (q, p)
    else:
        double = cos * cos - sin * sin
        wide, high = (w * cos - h * sin) / double, (h * cos - w * sin) / double
    return region.center_mm, (high, wide)
