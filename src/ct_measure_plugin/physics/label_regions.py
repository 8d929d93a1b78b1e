"""Label maps as regions: where each label lies, and its voxels as a Mask.

A label map holds a whole number a voxel; 0 is background. Everything here works on the boxes of the
labels and not on the whole map, so that a brush stroke costs what it touches.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, TypeAlias

import numpy as np
from scipy import ndimage

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.regions import Mask

if TYPE_CHECKING:
    from numpy.typing import NDArray

Index: TypeAlias = "tuple[slice, ...]"
Triple: TypeAlias = tuple[float, float, float]

__all__ = ["joined", "label_boxes", "label_mask", "overlap"]

#: Up to here a list with one place a number is quicker than looking for the numbers that occur.
_DENSE = 1 << 20


def label_boxes(labels: NDArray[Any]) -> dict[int, Index]:
    """Return the smallest box around each label.

    Parameters
    ----------
    labels : ndarray of int
        Any number of axes; 0 is background, negative numbers are labels like others.

    Returns
    -------
    dict of int to tuple of slice
        By label, increasing.

    Raises
    ------
    ArgumentError
        If the labels are no whole numbers.

    Examples
    --------
    >>> label_boxes(np.array([[0, 7, 7], [0, 7, 0]]))
    {7: (slice(0, 2, None), slice(1, 3, None))}
    """
    if labels.dtype.kind not in "iub":
        raise ArgumentError("labels", "must hold whole numbers", str(labels.dtype))
    if labels.size == 0:
        return {}
    low, high = int(labels.min()), int(labels.max())
    if low >= 0 and high <= _DENSE:
        found = ndimage.find_objects(labels.astype(np.uint8) if labels.dtype == bool else labels)
        return {i + 1: box for i, box in enumerate(found) if box is not None}
    numbers, place = np.unique(labels, return_inverse=True)
    boxes = ndimage.find_objects(place.reshape(labels.shape) + 1)
    return {int(n): box for n, box in zip(numbers, boxes, strict=True) if n != 0}


def label_mask(
    labels: NDArray[Any],
    label: int,
    box: Index,
    *,
    spacing_mm: Triple,
    origin_mm: Triple = (0.0, 0.0, 0.0),
    z_mm: float | None = None,
    name: str = "",
) -> Mask | None:
    """Return a label's voxels as a region, None if the box holds none of them.

    Parameters
    ----------
    labels : ndarray of int, shape (ny, nx) or (nz, ny, nx)
        The label map.
    label : int
        Which.
    box : tuple of slice
        Where to look: at least the label's own box.
    spacing_mm, origin_mm : (float, float, float)
        dz, dy, dx of the map, and z, y, x of the centre of its first voxel.
    z_mm : float, optional
        The slice that a flat map lies on; every slice if it is not given.
    name : str
        The region's name.

    Examples
    --------
    >>> labels = np.array([[0, 7, 7], [0, 7, 0]])
    >>> found = label_mask(labels, 7, label_boxes(labels)[7], spacing_mm=(1.0, 0.5, 0.5))
    >>> found.area_mm2, found.origin_mm
    (0.75, (0.0, 0.0, 0.5))
    """
    inside = labels[box] == label
    if not inside.any():
        return None
    tight = ndimage.find_objects(inside.view(np.uint8))[0]
    first = [b.start + t.start for b, t in zip(box, tight, strict=True)]
    first = first if labels.ndim == 3 else [0, *first]
    z, y, x = (o + n * s for o, n, s in zip(origin_mm, first, spacing_mm, strict=True))
    kept = np.ascontiguousarray(inside[tight])
    return Mask(kept, spacing_mm, (z, y, x), z_mm=z_mm if labels.ndim == 2 else None, name=name)


def overlap(one: Index, other: Index) -> bool:
    """Tell whether two boxes share a voxel.

    >>> overlap((slice(0, 2),), (slice(2, 4),)), overlap((slice(0, 3),), (slice(2, 4),))
    (False, True)
    """
    for a, b in zip(one, other, strict=True):
        if a.start >= b.stop or b.start >= a.stop:
            return False
    return True


def joined(one: Index, other: Index) -> Index:
    """Return the smallest box around two boxes.

    >>> joined((slice(0, 2),), (slice(5, 6),))
    (slice(0, 6, None),)
    """
    return tuple(
        slice(min(a.start, b.start), max(a.stop, b.stop)) for a, b in zip(one, other, strict=True)
    )
