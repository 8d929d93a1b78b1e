"""A label map brought onto the voxels of a Volume."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.physics.coverage import slices_of

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.regions import Labels
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["PlacedLabels", "place_labels"]

#: Distance between grids that counts as none, in voxels.
ALIGNED = 1e-3


@dataclass(frozen=True, slots=True, eq=False)
class PlacedLabels:
    """Labels on the voxels of a Volume.

    Attributes
    ----------
    labels : ndarray of int, shape (slices, ny, nx)
        The label at the centre of each voxel, 0 where the map does not reach.
    slices : list of int
        Which slices of the Volume these are.
    resampled : bool
        True if the map's grid is not the Volume's.
    outside : float
        Share of the labelled pixels of the map that lie outside the Volume.
    """

    labels: NDArray[Any]
    slices: list[int]
    resampled: bool
    outside: float


def place_labels(region: Labels, volume: Volume) -> PlacedLabels:
    """Return a label map on the voxels of a Volume, each with the label at its centre.

    Examples
    --------
    >>> from ct_measure_plugin.physics.regions import Labels
    >>> from ct_measure_plugin.physics.volume import Volume
    >>> fine = Labels(np.array([[1, 1, 2, 2]]), (1, 1, 0.5), (0, 0, -0.25))
    >>> place_labels(fine, Volume(np.zeros((1, 1, 2)), (1, 1, 1))).labels.tolist()
    [[[1, 2]]]
    """
    labels = region.labels if region.labels.ndim == 3 else region.labels[None]
    if _own(region, labels, volume):
        return PlacedLabels(labels, list(range(len(labels))), resampled=False, outside=0.0)
    rows, columns = (
        _nearest(
            volume.origin_mm[axis] + volume.spacing_mm[axis] * np.arange(volume.shape[axis]),
            region,
            axis,
        )
        for axis in (1, 2)
    )
    if region.labels.ndim == 3:
        stack = _nearest(volume.positions_mm, region, 0)
        slices = [int(k) for k in np.flatnonzero(stack.inside)]
    else:
        slices = slices_of(region, volume)
        stack = _Axis(np.zeros(volume.shape[0], np.intp), np.ones(volume.shape[0], bool), True)
    aligned = rows.aligned and columns.aligned and stack.aligned
    picked = labels[np.ix_(stack.index[slices], rows.index, columns.index)]
    picked[:, ~rows.inside] = 0
    picked[:, :, ~columns.inside] = 0
    return PlacedLabels(picked, slices, not aligned, _outside(labels, region, volume))


def _own(region: Labels, labels: NDArray[Any], volume: Volume) -> bool:
    """Tell whether a map lies on the volume's very voxels, however its slices are spaced."""
    return (
        region.labels.ndim == 3
        and labels.shape == volume.shape
        and bool(np.allclose(region.spacing_mm, volume.spacing_mm, rtol=1e-6))
        and bool(np.allclose(region.origin_mm, volume.origin_mm, rtol=0, atol=1e-4))
    )


@dataclass(frozen=True, slots=True, eq=False)
class _Axis:
    """Which of the map's pixels each voxel meets along one axis, and whether it meets one."""

    index: NDArray[np.intp]
    inside: NDArray[np.bool_]
    aligned: bool


def _nearest(centers_mm: NDArray[Any], region: Labels, axis: int) -> _Axis:
    count = region.labels.shape[axis - 3] if region.labels.ndim == 3 or axis else 1
    place = (centers_mm - region.origin_mm[axis]) / region.spacing_mm[axis]
    index = np.floor(place + 0.5).astype(np.intp)
    inside = (index >= 0) & (index < count)
    step = np.diff(place)
    aligned = bool(np.all(np.abs(place - index) < ALIGNED) and np.all(np.abs(step - 1) < ALIGNED))
    return _Axis(np.clip(index, 0, count - 1), inside, aligned)


def _outside(labels: NDArray[Any], region: Labels, volume: Volume) -> float:
    used = labels != 0
    total = int(np.count_nonzero(used))
    if not total:
        return 0.0
    for axis in (1, 2):
        at = region.origin_mm[axis] + region.spacing_mm[axis] * np.arange(labels.shape[axis])
        used = np.compress(_within(at, volume, axis), used, axis=axis)
    if region.labels.ndim == 3:
        at = region.origin_mm[0] + region.spacing_mm[0] * np.arange(labels.shape[0])
        used = used[_within(at, volume, 0)]
    return 1.0 - int(np.count_nonzero(used)) / total


def _within(at_mm: NDArray[Any], volume: Volume, axis: int) -> NDArray[np.bool_]:
    half = volume.spacing_mm[axis] / 2
    if axis == 0:
        first, last = float(volume.positions_mm[0]), float(volume.positions_mm[-1])
    else:
        first = volume.origin_mm[axis]
        last = first + volume.spacing_mm[axis] * (volume.shape[axis] - 1)
    inside: NDArray[np.bool_] = (at_mm >= first - half) & (at_mm <= last + half)
    return inside
