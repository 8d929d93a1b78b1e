"""Slices as physics takes them: one or many, read one by one, with their steps and positions."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]
    Flags = NDArray[np.bool_]

__all__ = ["checked_inside", "checked_planes", "checked_positions"]


def checked_planes(
    image: ArrayLike, spacing_mm: tuple[float, float], least: int = 0
) -> NDArray[np.generic]:
    """Return slices as a stack, shape (nz, ny, nx); lazy arrays stay what they are.

    Raises
    ------
    ArgumentError
        If they are no numbers of that shape, or have fewer than `least` rows or columns, or the
        spacing is not two lengths.

    Examples
    --------
    >>> checked_planes(np.zeros((40, 50)), (0.5, 0.5)).shape
    (1, 40, 50)
    """
    data: NDArray[np.generic] = image if hasattr(image, "dtype") else np.asarray(image)  # type: ignore[assignment]
    if data.ndim == 2:
        data = data[None]
    if data.ndim != 3 or data.dtype.kind not in "iuf" or min(data.shape[1:]) < least:
        raise ArgumentError("image", "must have shape (ny, nx) or (nz, ny, nx)", data.shape)
    steps = tuple(float(s) for s in spacing_mm)
    if len(steps) != 2 or not all(0 < s < math.inf for s in steps):
        raise ArgumentError("spacing_mm", "must hold 2 lengths greater than 0", spacing_mm)
    return data


def checked_positions(z_mm: Sequence[float] | None, count: int) -> Floats:
    """Return the slices' positions, their numbers if none are given.

    >>> checked_positions(None, 3).tolist()
    [0.0, 1.0, 2.0]
    """
    z = np.arange(count, dtype=float) if z_mm is None else np.asarray(z_mm, dtype=float)
    if z.shape != (count,):
        raise ArgumentError("z_mm", f"must hold {count} positions", z.shape)
    return z


def checked_inside(inside: ArrayLike, shape: tuple[int, ...]) -> Flags:
    """Return a mask of the pixels of a slice.

    >>> int(checked_inside(np.eye(3, dtype=bool), (3, 3)).sum())
    3
    """
    mask = np.asarray(inside)
    if mask.shape != shape or mask.dtype != bool:
        raise ArgumentError("inside", f"must be of bool and have shape {shape}", mask.shape)
    return mask
