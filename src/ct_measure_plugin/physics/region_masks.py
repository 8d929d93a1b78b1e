"""Regions given pixel by pixel: one mask, or a map of labels."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, ClassVar

import numpy as np

from ct_measure_plugin.errors import RegionError
from ct_measure_plugin.physics.region_base import Region, finite, positive

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = ["Labels", "Mask", "boxes_of"]

#: Labels up to this number index a table directly.
LARGEST_PLAIN = 1 << 20


@dataclass(frozen=True, slots=True, eq=False)
class Mask(Region):
    """A region given pixel by pixel, as from a label map.

    Attributes
    ----------
    inside : ndarray of bool, shape (ny, nx) or (nz, ny, nx)
        True inside. A flat mask lies on the slices that `z_mm` names; a deep one brings its own.
    spacing_mm : (float, float, float)
        dz, dy, dx of the mask's grid.
    origin_mm : (float, float, float)
        z, y, x of the centre of its first voxel.
    """

    kind: ClassVar[str] = "mask"

    inside: NDArray[np.bool_]
    spacing_mm: tuple[float, float, float]
    origin_mm: tuple[float, float, float] = (0.0, 0.0, 0.0)

    def __post_init__(self) -> None:
        Region.__post_init__(self)
        if self.inside.ndim not in (2, 3):
            raise RegionError("inside", "must be 2-D or 3-D", self.inside.shape)
        if self.inside.dtype != np.bool_:
            raise RegionError("inside", "must be an array of bool", self.inside.dtype)
        if not self.inside.any():
            raise RegionError("inside", "must hold at least one pixel", "none")
        positive("spacing_mm", *self.spacing_mm)
        finite("origin_mm", *self.origin_mm)

    # its parent compares names and slices alone; a map is equal to itself and to nothing else
    def __eq__(self, other: object) -> bool:
        return self is other

    def __hash__(self) -> int:
        return object.__hash__(self)

    @property
    def area_mm2(self) -> float:
        """Area of the pixels inside, summed over slices."""
        return float(np.count_nonzero(self.inside)) * self.spacing_mm[1] * self.spacing_mm[2]


@dataclass(frozen=True, slots=True, eq=False)
class Labels(Region):
    """A label map: many regions at once, each the pixels of one number; 0 is background.

    Attributes
    ----------
    labels : ndarray of int, shape (ny, nx) or (nz, ny, nx)
        A flat map lies on the slices that `z_mm` names; a deep one brings its own.
    spacing_mm : (float, float, float)
        dz, dy, dx of the map's grid.
    origin_mm : (float, float, float)
        z, y, x of the centre of its first voxel.
    names, codes : tuple of (int, str)
        What labels are called, and their classes as "scheme:value".

    Examples
    --------
    >>> found = Labels(np.array([[0, 2, 2], [0, 0, 5]]), (1, 1, 1), names=((5, "rod"),))
    >>> [(mask.name, mask.area_mm2, mask.origin_mm) for mask in found.masks()]
    [('label 2', 2.0, (0.0, 0.0, 1.0)), ('rod', 1.0, (0.0, 1.0, 2.0))]
    """

    kind: ClassVar[str] = "labels"

    labels: NDArray[Any]
    spacing_mm: tuple[float, float, float]
    origin_mm: tuple[float, float, float] = (0.0, 0.0, 0.0)
    names: tuple[tuple[int, str], ...] = ()
    codes: tuple[tuple[int, str], ...] = ()

    def __post_init__(self) -> None:
        Region.__post_init__(self)
        if self.labels.ndim not in (2, 3):
            raise RegionError("labels", "must be 2-D or 3-D", self.labels.shape)
        if self.labels.dtype.kind not in "iu":
            raise RegionError("labels", "must be an array of whole numbers", self.labels.dtype)
        positive("spacing_mm", *self.spacing_mm)
        finite("origin_mm", *self.origin_mm)

    # its parent compares names and slices alone; a map is equal to itself and to nothing else
    def __eq__(self, other: object) -> bool:
        return self is other

    def __hash__(self) -> int:
        return object.__hash__(self)

    def numbers(self) -> tuple[int, ...]:
        """Return the labels that occur, increasing."""
        return tuple(int(number) for number in np.unique(self.labels) if number)

    def masks(self) -> tuple[Mask, ...]:
        """Return every label as a mask of its own, cut down to where it is."""
        numbers = self.numbers()
        names, codes = dict(self.names), dict(self.codes)
        found = []
        for number, box in zip(numbers, boxes_of(self.labels, numbers), strict=True):
            corner = (0, *(edge.start for edge in box))[-3:]
            origin = tuple(
                float(o) + float(step) * k
                for o, step, k in zip(self.origin_mm, self.spacing_mm, corner, strict=True)
            )
            found.append(
                Mask(
                    self.labels[box] == number,
                    self.spacing_mm,
                    (origin[0], origin[1], origin[2]),
                    z_mm=self.z_mm,
                    name=names.get(number, f"label {number}"),
                    group=names.get(number, ""),
                    code=codes.get(number, ""),
                    values=self.values,
                )
            )
        return tuple(found)


def boxes_of(labels: NDArray[Any], numbers: tuple[int, ...]) -> list[tuple[slice, ...]]:
    """Return the box of each label, in the order of the numbers, all of which occur.

    >>> boxes_of(np.array([[0, 7, 7]]), (7,))
    [(slice(0, 1, None), slice(1, 3, None))]
    """
    from scipy import ndimage

    if not numbers:
        return []
    if numbers[0] < 0 or numbers[-1] > LARGEST_PLAIN:
        order = np.searchsorted(np.asarray(numbers), labels)
        order = np.minimum(order, len(numbers) - 1)
        labels = np.where(labels == np.asarray(numbers)[order], order + 1, 0)
        numbers = tuple(range(1, len(numbers) + 1))
    found = ndimage.find_objects(labels)
    return [found[number - 1] for number in numbers]
