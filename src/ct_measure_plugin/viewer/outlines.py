"""Shapes and points as things that can be taken away and put back: outline, looks and features.

napari has no undo for them. What a dock is about to change is kept here first, by the number that
stays with each region, so that it can be put back whatever has been drawn or deleted since.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.viewer.region_features import ID, ids_on

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping, Sequence

    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["Outline", "add_outlines", "outlines_of", "put", "sort_of"]

#: What a shape and a point look like, as attributes of their layers with one entry a region.
_LOOKS = {
    "shapes": ("edge_width", "edge_color", "face_color", "z_index"),
    "points": ("size", "symbol", "border_width", "border_color", "face_color", "shown"),
}


@dataclass(frozen=True, slots=True, eq=False)
class Outline:
    """One shape or point.

    Attributes
    ----------
    corners : ndarray, shape (n, axes)
        In the layer's own units; one row for a point.
    kind : str
        napari's word: "ellipse", "rectangle", "polygon", "path", "line"; "point".
    looks : dict
        Width, colours and the like, by the layer's attribute; empty for those of a new one.
    features : dict
        Its row of features.
    """

    corners: Floats
    kind: str
    looks: dict[str, Any] = field(default_factory=dict)
    features: dict[str, Any] = field(default_factory=dict)


def sort_of(layer: Any) -> str:
    """Return "shapes" or "points"."""
    return "shapes" if hasattr(layer, "nshapes") else "points"


def outlines_of(layer: Any, indices: Iterable[int]) -> dict[int, Outline]:
    """Return shapes or points of a layer by the number that stays with each."""
    ids = ids_on(layer)
    return {ids[i]: _outline(layer, i) for i in indices}


def add_outlines(layer: Any, outlines: Sequence[Outline]) -> list[int]:
    """Add shapes or points; return the numbers that stay with them.

    A row of features that brings a number keeps it, if nothing else on the layer has it.
    """
    if not outlines:
        return []
    count = len(layer.data)
    before = layer.features.copy()
    if sort_of(layer) == "shapes":
        _add_shapes(layer, outlines)
    else:
        _add_points(layer, outlines)
    _set_rows(layer, before, count, outlines)
    return ids_on(layer)[count:]


def put(layer: Any, wanted: Mapping[int, Outline | None]) -> None:
    """Bring regions to a state: None takes one away, an Outline moves it there or puts it back.

    Regions that are not named stay as they are; so does the selection, as far as it still exists.
    """
    ids = ids_on(layer)
    at = {number: i for i, number in enumerate(ids)}
    chosen = {ids[i] for i in layer.selected_data if i < len(ids)}
    gone = [at[number] for number, one in wanted.items() if one is None and number in at]
    there = {at[n]: one for n, one in wanted.items() if one is not None and n in at}
    new = [one for number, one in wanted.items() if one is not None and number not in at]
    if there:
        _move(layer, there)
    if gone:
        layer.remove(gone)
    add_outlines(layer, new)
    layer.selected_data = {i for i, number in enumerate(ids_on(layer)) if number in chosen}


def _outline(layer: Any, index: int) -> Outline:
    sort = sort_of(layer)
    corners = np.array(np.atleast_2d(layer.data[index]), dtype=float)
    kind = str(layer.shape_type[index]) if sort == "shapes" else "point"
    looks = {name: _kept(getattr(layer, name)[index]) for name in _LOOKS[sort]}
    features = layer.features
    row = {name: features[name].iloc[index] for name in features.columns}
    return Outline(corners, kind, looks, row)


def _kept(value: Any) -> Any:
    return value.copy() if isinstance(value, np.ndarray) else value


def _add_shapes(layer: Any, outlines: Sequence[Outline]) -> None:
    more: dict[str, Any] = {}
    if all(one.looks for one in outlines):
        more = {
            "edge_width": [float(one.looks["edge_width"]) for one in outlines],
            "edge_color": np.array([one.looks["edge_color"] for one in outlines]),
            "face_color": np.array([one.looks["face_color"] for one in outlines]),
            "z_index": [int(one.looks["z_index"]) for one in outlines],
        }
    kinds = [one.kind for one in outlines]
    layer.add([one.corners for one in outlines], shape_type=kinds, **more)


def _add_points(layer: Any, outlines: Sequence[Outline]) -> None:
    count = len(layer.data)
    layer.add(np.concatenate([one.corners for one in outlines]))
    for name in _LOOKS["points"]:
        values = list(getattr(layer, name))
        for i, one in enumerate(outlines):
            if name in one.looks:
                values[count + i] = one.looks[name]
        setattr(layer, name, values if name == "symbol" else np.array(values))


def _set_rows(layer: Any, before: Any, count: int, outlines: Sequence[Outline]) -> None:
    """Give added regions their rows of features; the others' rows stay as they were."""
    features = layer.features.copy()
    names = dict.fromkeys([*before.columns, *(name for one in outlines for name in one.features)])
    for name in names:
        if name in features:
            column = list(before[name]) + list(features[name][count:])
        else:
            column = [_blank(outlines, name)] * len(layer.data)
        for i, one in enumerate(outlines):
            if one.features:
                column[count + i] = one.features.get(name, _blank(outlines, name))
        features[name] = column
    taken = set(before[ID]) if ID in before else set()
    if ID in features:
        numbers = list(features[ID])
        for i in range(len(outlines)):
            numbers[count + i] = 0 if numbers[count + i] in taken else numbers[count + i]
        features[ID] = numbers
    if len(names):
        layer.features = features


def _blank(outlines: Sequence[Outline], name: str) -> Any:
    text = any(isinstance(one.features.get(name), str) for one in outlines)
    return "" if text else np.nan


def _move(layer: Any, there: Mapping[int, Outline]) -> None:
    if sort_of(layer) == "shapes":
        data = list(zip(layer.data, layer.shape_type, strict=True))
        for i, one in there.items():
            data[i] = (one.corners, one.kind)
        layer.data = data
        return
    points = np.array(layer.data)
    for i, one in there.items():
        points[i] = one.corners[0]
    layer.data = points
