"""Values along a path through slices, between pixels where need be."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import ndimage

from ct_measure_plugin.physics.path_pieces import pieces_of

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["PathPoints", "path_points", "sample", "together"]


@dataclass(frozen=True, slots=True, eq=False)
class PathPoints:
    """Evenly spaced points along a path, and beside it.

    Attributes
    ----------
    distance : ndarray, shape (n,)
        Arc length from the start, mm.
    offset : ndarray, shape (m,)
        Distance of the parallel lines from the path, mm; to the left when walking along it.
    place : ndarray, shape (m, n, 2)
        y and x in mm.
    own : ndarray of bool, shape (m, n)
        False where a point beside a corner lies on the other piece's side of the line that halves
        the corner, and so counts there.
    corner : ndarray, shape (k,)
        Arc length of the corners between start and end, mm.
    reach : ndarray, shape (k,)
        How far along the path a corner is felt at the outermost lines, mm.
    """

    distance: Floats
    offset: Floats
    place: Floats
    own: NDArray[np.bool_]
    corner: Floats
    reach: Floats


def path_points(points: Floats, *, step: float, width: float, line_step: float) -> PathPoints:
    """Return points every `step` or less along a path, on parallel lines across a width.

    Parameters
    ----------
    points : ndarray, shape (k, 2)
        Corners as (y, x) in mm, k >= 2.
    step, line_step : float
        Largest distance between points along and across, mm.
    width : float
        Distance between the outermost lines, mm; 0 for the path alone.

    Notes
    -----
    The lines beside the path are offset along the normal of the piece that each point lies on; on
    the inner side of a corner, where two pieces' lines overlap, each piece keeps its own half.

    Examples
    --------
    >>> found = path_points(np.array([[0, 0], [0, 3], [4, 3]]), step=1.0, width=0.0, line_step=1.0)
    >>> found.distance
    array([0., 1., 2., 3., 4., 5., 6., 7.])
    >>> found.place[0, 5]
    array([2., 3.])
    """
    corners = np.asarray(points, dtype=np.float64)
    pieces = pieces_of(corners)
    ends = np.concatenate([[0.0], np.cumsum(pieces.length)])
    total = float(ends[-1])
    count = max(int(np.ceil(total / step - 1e-9)), 1)
    distance = np.linspace(0.0, total, count + 1)
    piece = np.clip(np.searchsorted(ends, distance, side="right") - 1, 0, len(corners) - 2)
    at = distance - ends[piece]
    middle = pieces.start[piece] + pieces.along[piece] * at[:, None]
    lines = 1 if width <= 0 else max(int(np.ceil(width / line_step - 1e-9)), 1) + 1
    offset = np.zeros(1) if lines == 1 else np.linspace(-width / 2, width / 2, lines)
    place = middle + offset[:, None, None] * pieces.left[piece]
    own = pieces.holds(piece, at, offset[:, None])
    reach = float(offset[-1]) * np.abs(pieces.lean[1:-1])
    return PathPoints(distance, offset, place, own, ends[1:-1], reach)


def sample(
    stack: Floats, place: Floats, spacing_mm: tuple[float, float], order: int
) -> tuple[Floats, NDArray[np.bool_]]:
    """Return values at places, shape (nz, m, n), and whether each lies within the image, (m, n).

    Parameters
    ----------
    stack : ndarray, shape (nz, ny, nx)
        Slices.
    place : ndarray, shape (m, n, 2)
        y and x in mm from the centre of pixel (0, 0).
    order : {0, 1, 3}
        Nearest pixel, linear, or cubic B-spline interpolation.
    """
    index = place / np.asarray(spacing_mm)
    coordinates = np.moveaxis(index, -1, 0)
    low, high = -0.5, np.asarray(stack.shape[1:]) - 0.5
    inside = np.all((index >= low) & (index <= high), axis=-1)
    planes = [
        ndimage.map_coordinates(plane, coordinates, order=order, mode="reflect") for plane in stack
    ]
    return np.asarray(planes, dtype=np.float64), inside


def together(values: Floats, own: NDArray[np.bool_]) -> tuple[Floats, Floats | None]:
    """Return the mean over slices and lines at each point of a path, and the SD over them.

    Parameters
    ----------
    values : ndarray, shape (nz, m, n)
        At every point.
    own : ndarray of bool, shape (m, n)
        Which of them count; one at least at every distance.

    Returns
    -------
    mean, sd : ndarray, shape (n,)
        No SD where a single value stands at some distance.

    Examples
    --------
    >>> values = np.array([[[1.0, 2.0], [3.0, 9.0]]])
    >>> together(values, np.array([[True, True], [True, False]]))
    (array([2., 2.]), None)
    """
    count = own.sum(axis=0) * len(values)
    mean = np.where(own, values, 0.0).sum(axis=(0, 1)) / count
    if count.min() < 2:
        return mean, None
    square = (np.where(own, values - mean, 0.0) ** 2).sum(axis=(0, 1))
    return mean, np.sqrt(square / (count - 1))
