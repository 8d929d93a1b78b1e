"""Where a layer's voxels lie in the viewer's world: its matrix, its units, its axes."""

from __future__ import annotations

import math
from functools import cache
from typing import TYPE_CHECKING, Any, TypeAlias

import numpy as np

from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    from napari.layers import Image
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["geometry_of", "lying_like", "world_in_mm", "world_of_layer"]

Spacing: TypeAlias = tuple[float, float, float]

#: Cosine above which two axes are no longer at right angles: 0.06 degrees, far above rounding.
_SQUARE = 1e-3


def world_of_layer(layer: Image) -> tuple[Floats, Floats, Floats | None]:
    """Return the last axes' data-to-world matrix and shift, and mm a world unit (None: pixels).

    napari turns one point at a time, so the matrix is taken from one call an axis.
    """
    n = layer.ndim
    zero = np.asarray(layer.data_to_world(np.zeros(n)), dtype=float)
    columns = [np.asarray(layer.data_to_world(np.eye(n)[i]), dtype=float) - zero for i in range(n)]
    last = slice(max(0, n - 3), n)
    return np.stack(columns, axis=1)[last, last], zero[last], world_in_mm(layer)


def lying_like(layer: Any) -> dict[str, Any]:
    """Return what a new layer is given to lie just where another lies."""
    names = ("scale", "translate", "rotate", "shear", "affine", "units", "axis_labels")
    return {name: getattr(layer, name) for name in names}


def world_in_mm(layer: Image) -> Floats | None:
    """Return the millimetres of one world unit along the last axes, None if any is no length."""
    factors = [_in_mm(unit) for unit in layer.units[-3:]]
    return None if None in factors else np.array(factors)


@cache
def _in_mm(unit: Any) -> float | None:
    """Return the millimetres of a unit, None if it is no length; asked at every tick of a drag."""
    return float((1.0 * unit).to("mm").magnitude) if "[length]" in unit.dimensionality else None


def geometry_of(layer: Image, entered_mm: Spacing | None) -> tuple[Spacing, Spacing, float, bool]:
    """Return spacing, origin, tilt and whether the spacing was entered by hand."""
    matrix, shift, factors = world_of_layer(layer)
    by_hand = factors is None
    if factors is None and entered_mm is None:
        raise ArgumentError(
            "layer", "must be in a unit of length, or its pixel size be entered", layer.name
        )
    if factors is not None:
        matrix, shift = matrix * factors[:, None], shift * factors
    spacing, directions, tilt = _axes(matrix, layer.name)
    origin = directions @ shift
    if by_hand:
        entered = np.asarray(entered_mm, dtype=float)[-len(spacing) :]
        origin, spacing = origin * entered / spacing, entered
    dz = entered_mm[0] if entered_mm is not None else 1.0
    if len(spacing) == 2:
        spacing, origin = np.array([dz, *spacing]), np.array([0.0, *origin])
    z, y, x = (float(v) for v in spacing)
    z_0, y_0, x_0 = (float(v) for v in origin)
    return (z, y, x), (z_0, y_0, x_0), tilt, by_hand


def _axes(matrix: Floats, name: str) -> tuple[Floats, Floats, float]:
    """Return spacing, unit directions (rows) and stacking tilt of the columns of a matrix."""
    lengths = np.linalg.norm(matrix, axis=0)
    if not bool(np.all(lengths > 0)):
        raise ArgumentError("layer", "must have a pixel size greater than 0 on each axis", name)
    along = matrix / lengths
    if abs(float(along[:, -2] @ along[:, -1])) > _SQUARE:
        raise ArgumentError("layer", "must have rows and columns at right angles", name)
    if len(lengths) == 2:
        return lengths, along.T, 0.0
    normal = np.cross(along[:, 1], along[:, 2])
    rise = float(normal @ along[:, 0])
    if abs(rise) < _SQUARE:
        raise ArgumentError("layer", "must have slices that do not lie in one plane", name)
    normal *= math.copysign(1.0, rise)
    tilt = math.degrees(math.acos(min(1.0, abs(rise))))
    spacing = np.array([lengths[0] * abs(rise), lengths[1], lengths[2]])
    return spacing, np.stack([normal, along[:, 1], along[:, 2]]), tilt
