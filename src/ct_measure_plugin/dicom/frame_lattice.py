"""Frames of any orientation on a Volume's grid: which slice, which pixels, turned how."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from ct_measure_plugin.errors import SeriesError

if TYPE_CHECKING:
    from numpy.typing import NDArray
    from pydicom.dataset import Dataset

    from ct_measure_plugin.physics.volume import Volume

    Floats = NDArray[np.float64]

__all__ = ["FrameGeometry", "Lattice", "Place", "frame_geometry"]

#: a frame may lie this far from a slice and from its pixels, in slice steps and pixels
OFF_SLICE: Final = 0.05
OFF_PIXEL: Final = 0.05
#: a step from pixel to pixel must be one pixel to this, so that 512 of them stay within a twentieth
OFF_STEP: Final = 1e-4


@dataclass(frozen=True, slots=True)
class FrameGeometry:
    """Position of the first pixel, and the steps from row to row and column to column, LPS mm."""

    position: Floats
    row_step: Floats
    column_step: Floats


def frame_geometry(group: Dataset, shared: Dataset) -> FrameGeometry:
    """Return where a frame lies by its functional groups.

    Raises
    ------
    ValueError
        If they do not say it in finite numbers.
    """

    def found(sequence: str) -> Dataset:
        item: Dataset = (group if sequence in group else shared)[sequence].value[0]
        return item

    position = found("PlanePositionSequence").ImagePositionPatient
    cosines = np.array(found("PlaneOrientationSequence").ImageOrientationPatient, dtype=float)
    dy, dx = (float(step) for step in found("PixelMeasuresSequence").PixelSpacing)
    place = np.array(position, dtype=float)
    if cosines.shape != (6,) or place.shape != (3,):
        raise ValueError("orientation or position is incomplete")
    if not np.all(np.isfinite([*cosines, *place, dy, dx])):
        raise ValueError("orientation, position or spacing is no number")
    return FrameGeometry(place, cosines[3:] * dy, cosines[:3] * dx)


@dataclass(frozen=True, slots=True)
class Place:
    """Slice, target pixels, and how the frame's pixels are turned and cropped to fit them."""

    index: int
    rows: slice
    columns: slice
    swapped: bool
    take: tuple[slice, slice]


class Lattice:
    """A Volume's grid in the patient.

    Parameters
    ----------
    grid : Volume
        With an affine.
    """

    def __init__(self, grid: Volume) -> None:
        affine = np.asarray(grid.affine_lps, dtype=float)
        self._shape = grid.shape[1:]
        dz, dy, dx = grid.spacing_mm
        self._dz, self._steps = dz, np.array([dy, dx])
        y, x = affine[:3, 1] / dy, affine[:3, 2] / dx
        self._axes = np.stack([np.cross(x, y), y, x])
        z = grid.positions_mm - grid.positions_mm[0]
        self._z = z
        # slices follow the stacking direction, which may lean against the normal
        self._origins = affine[:3, 3] + np.outer(z / dz, affine[:3, 0])

    def place(self, frame: FrameGeometry, shape: tuple[int, int]) -> Place | None:
        """Return where a frame goes, None if that is wholly outside.

        Raises
        ------
        SeriesError
            If the frame's pixels are not the grid's.
        """
        down, across = self._axes @ frame.row_step, self._axes @ frame.column_step
        steps = np.array([down[1:], across[1:]]) / self._steps
        whole = np.rint(steps)
        flat = max(abs(down[0]), abs(across[0])) <= OFF_STEP * min(self._steps)
        if not flat or np.any(np.abs(steps - whole) > OFF_STEP) or not _permutes(whole):
            raise SeriesError("the segmentation's pixels have another size or orientation")
        height = float(self._axes[0] @ (frame.position - self._origins[0]))
        index = int(np.argmin(np.abs(self._z - height)))
        off = abs(float(self._z[index]) - height)
        if off > OFF_SLICE * self._dz:
            if height < self._z[0] or height > self._z[-1]:
                return None
            raise SeriesError("the segmentation lies between the slices of the series")
        first = (self._axes @ (frame.position - self._origins[index]))[1:] / self._steps
        corner = np.rint(first)
        if np.any(np.abs(first - corner) > OFF_PIXEL):
            raise SeriesError("the segmentation lies between the pixels of the series")
        return self._cropped(index, corner.astype(int), whole.astype(int), shape)

    def _cropped(
        self, index: int, corner: NDArray[Any], steps: NDArray[Any], shape: tuple[int, int]
    ) -> Place | None:
        swapped = steps[0, 0] == 0  # the frame's rows run along the grid's columns
        sizes = (shape[1], shape[0]) if swapped else shape
        senses = (steps[1, 0], steps[0, 1]) if swapped else (steps[0, 0], steps[1, 1])
        targets, takes = [], []
        for start, size, sense, limit in zip(corner, sizes, senses, self._shape, strict=True):
            low = int(start) if sense > 0 else int(start) - size + 1
            lost_low, lost_high = max(0, -low), max(0, low + size - limit)
            if lost_low + lost_high >= size:
                return None
            targets.append(slice(low + lost_low, low + size - lost_high))
            if sense > 0:
                takes.append(slice(lost_low, size - lost_high))
            else:
                stop = lost_high - 1
                takes.append(slice(size - 1 - lost_low, None if stop < 0 else stop, -1))
        return Place(index, targets[0], targets[1], bool(swapped), (takes[0], takes[1]))


def _permutes(steps: Floats) -> bool:
    """Return True if a step down and a step across are one pixel each, along different axes."""
    absolute = np.abs(steps)
    return bool(np.all(absolute.sum(axis=0) == 1) and np.all(absolute.sum(axis=1) == 1))
