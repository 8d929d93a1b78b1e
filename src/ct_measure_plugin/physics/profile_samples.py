"""Values along a path through slices, between pixels where need be."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import ndimage

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["PathPoints", "path_points", "sample"]


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
    """

    distance: Floats
    offset: Floats
    place: Floats


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
    At a corner the lines beside the path turn with it: they are offset along the normal of the
    piece that each point lies on.

    Examples
    --------
    >>> found = path_points(np.array([[0, 0], [0, 3], [4, 3]]), step=1.0, width=0.0, line_step=1.0)
    >>> found.distance
    array([0., 1., 2., 3., 4., 5., 6., 7.])
    >>> found.place[0, 5]
    array([2., 3.])
    """
    corners = np.asarray(points, dtype=np.float64)
    pieces = np.diff(corners, axis=0)
    lengths = np.hypot(pieces[:, 0], pieces[:, 1])
    ends = np.concatenate([[0.0], np.cumsum(lengths)])
    total = float(ends[-1])
    count = max(int(np.ceil(total / step - 1e-9)), 1)
    distance = np.linspace(0.0, total, count + 1)
    piece = np.clip(np.searchsorted(ends, distance, side="right") - 1, 0, len(pieces) - 1)
    along = pieces[piece] / lengths[piece, None]
    middle = corners[piece] + along * (distance - ends[piece])[:, None]
    lines = 1 if width <= 0 else max(int(np.ceil(width / line_step - 1e-9)), 1) + 1
    offset = np.zeros(1) if lines == 1 else np.linspace(-width / 2, width / 2, lines)
    # a quarter turn counter-clockwise on the screen, where y points down
    left = np.stack([-along[:, 1], along[:, 0]], axis=1)
    return PathPoints(distance, offset, middle + offset[:, None, None] * left)


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
