"""Copies of regions: on other slices, on other layers, mirrored, in rows and in rings.

Everything happens in the image's own plane, in mm, so that a ring is a circle on stretched pixels
too, and a copy on a layer of other units lies where the original lies.
"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.viewer.outlines import Outline, sort_of
from ct_measure_plugin.viewer.region_features import ID, NAME, PREFIX, Z_HIGH, Z_LOW

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.viewer.layer_frame import LayerFrame

    Floats = NDArray[np.float64]

__all__ = ["MOST", "array", "centre_of", "mirror", "on_slices", "onto", "ring", "shift"]

#: More copies than this at once are a slip of the hand.
MOST = 2000


def centre_of(frame: LayerFrame, outlines: Sequence[Outline]) -> tuple[float, float]:
    """Return the middle (y, x), in mm, of the box around regions."""
    planes = np.concatenate([_planes(frame, one)[:, 1:] for one in outlines])
    y, x = (planes.min(axis=0) + planes.max(axis=0)) / 2
    return float(y), float(x)


def shift(
    frame: LayerFrame, outlines: Iterable[Outline], by_mm: tuple[float, float]
) -> list[Outline]:
    """Return regions moved by (y, x) mm."""
    step = np.array([0.0, *by_mm])
    return [_placed(frame, one, _planes(frame, one) + step) for one in outlines]


def mirror(
    frame: LayerFrame,
    outlines: Iterable[Outline],
    about_mm: tuple[float, float],
    across: Literal["vertical", "horizontal"],
) -> list[Outline]:
    """Return regions mirrored across a line through a point.

    Parameters
    ----------
    frame : LayerFrame
        Of the regions' layer.
    outlines : iterable of Outline
        What to mirror.
    about_mm : (float, float)
        y and x of the point.
    across : {"vertical", "horizontal"}
        The line: across a vertical one left and right change places.
    """
    axis = 2 if across == "vertical" else 1
    found = []
    for one in outlines:
        planes = _planes(frame, one)
        planes[:, axis] = 2 * about_mm[axis - 1] - planes[:, axis]
        found.append(_placed(frame, one, planes))
    return found


def array(
    frame: LayerFrame,
    outlines: Sequence[Outline],
    rows: int,
    columns: int,
    step_mm: tuple[float, float],
) -> list[Outline]:
    """Return the copies that complete regions to rows and columns; the first place is their own.

    Raises
    ------
    ArgumentError
        If there are no copies to be made, too many, or copies would lie on one another.
    """
    count = rows * columns - 1
    _count("rows, columns", count * len(outlines))
    if (rows > 1 and step_mm[0] == 0) or (columns > 1 and step_mm[1] == 0):
        raise ArgumentError("step", "must not be 0, or copies lie on one another", step_mm)
    places = [(i, j) for i in range(rows) for j in range(columns)][1:]
    found = []
    for n, (i, j) in enumerate(places, start=2):
        moved = shift(frame, outlines, (i * step_mm[0], j * step_mm[1]))
        found += [_copy(one, n) for one in moved]
    return found


def ring(
    frame: LayerFrame,
    outlines: Sequence[Outline],
    count: int,
    about_mm: tuple[float, float],
    *,
    turned: bool = True,
) -> list[Outline]:
    """Return the copies that complete regions to an even ring around a point.

    Parameters
    ----------
    frame : LayerFrame
        Of the regions' layer.
    outlines : sequence of Outline
        What to copy; they are the ring's first place.
    count : int
        Places in the ring, counter-clockwise.
    about_mm : (float, float)
        y and x of its centre.
    turned : bool
        Whether copies are turned with their place, or only moved.

    Raises
    ------
    ArgumentError
        If there are no copies to be made, or too many.
    """
    _count("count", (count - 1) * len(outlines))
    own = centre_of(frame, outlines)
    found = []
    for n in range(1, count):
        turn = _turn(2 * math.pi * n / count)
        about = np.asarray(about_mm)
        for one in outlines:
            planes = _planes(frame, one)
            if turned:
                planes[:, 1:] = (planes[:, 1:] - about) @ turn.T + about
            else:
                planes[:, 1:] += (np.asarray(own) - about) @ turn.T + about - own
            found.append(_copy(_placed(frame, one, planes), n + 1))
    return found


def on_slices(
    frame: LayerFrame, outlines: Sequence[Outline], slices: Iterable[int]
) -> list[Outline]:
    """Return copies of regions on other slices of the image; their own slice gets none.

    Raises
    ------
    ArgumentError
        If the layer is flat, there is no other slice, or there would be too many copies.
    """
    if frame.flat:
        raise ArgumentError("layer", "must have a slice axis; a flat one lies on every slice", "2D")
    found = []
    wanted = sorted(set(slices))
    for one in outlines:
        planes = _planes(frame, one)
        own = round(float(planes[:, 0].mean()))
        for k in wanted:
            if k == own:
                continue
            at = planes + np.array([k - own, 0.0, 0.0])
            moved = _copy(_placed(frame, one, at), None)
            found.append(_shifted_range(moved, frame, own, k))
    _count("slices", len(found))
    return found


def onto(frame: LayerFrame, other: LayerFrame, outlines: Iterable[Outline]) -> list[Outline]:
    """Return copies of regions for another layer, lying where the originals lie.

    Parameters
    ----------
    frame, other : LayerFrame
        Of the layer they are on and of the one they go to, for the same image.
    outlines : iterable of Outline
        What to copy. A line's width follows the layer's units.
    """
    scale = frame.stretch / other.stretch
    found = []
    for one in outlines:
        looks = dict(one.looks)
        for name in ("edge_width", "size"):
            if name in looks:
                looks[name] = looks[name] * scale
        corners = other.from_planes(_planes(frame, one))
        copied = _copy(replace(one, corners=corners, looks=looks), None)
        found.append(_as_point(copied) if sort_of(other.layer) == "points" else copied)
    return found


def _planes(frame: LayerFrame, outline: Outline) -> Floats:
    return frame.planes(frame.voxels(outline.corners))


def _placed(frame: LayerFrame, outline: Outline, planes: Floats) -> Outline:
    return replace(outline, corners=frame.from_planes(planes))


def _turn(angle: float) -> Floats:
    """Return the matrix that turns (y, x) counter-clockwise on the screen, where y points down."""
    c, s = math.cos(angle), math.sin(angle)
    return np.array([[c, -s], [s, c]])


def _copy(outline: Outline, number: int | None) -> Outline:
    """Return a copy without what belongs to the original alone: its number and its answers."""
    row = {
        name: value
        for name, value in outline.features.items()
        if name != ID and not name.startswith(PREFIX)
    }
    name = row.get(NAME)
    if number is not None and isinstance(name, str) and name:
        row[NAME] = f"{name} {number}"
    return replace(outline, features=row)


def _shifted_range(outline: Outline, frame: LayerFrame, own: int, k: int) -> Outline:
    """Return a copy whose range of slices has moved as far as the copy itself."""
    volume = frame.placement.volume
    count = volume.shape[0]
    if not 0 <= own < count:
        return outline
    by = float(volume.positions_mm[min(max(k, 0), count - 1)] - volume.positions_mm[own])
    row = dict(outline.features)
    for name in (Z_LOW, Z_HIGH):
        value = row.get(name)
        if isinstance(value, int | float) and math.isfinite(value):
            row[name] = float(value) + by
    return replace(outline, features=row)


def _as_point(outline: Outline) -> Outline:
    return replace(outline, corners=outline.corners.mean(axis=0, keepdims=True), kind="point")


def _count(what: str, count: Any) -> None:
    if not 1 <= count <= MOST:
        raise ArgumentError(what, f"must make 1 to {MOST} copies", count)
