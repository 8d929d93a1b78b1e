"""Labels layers and regions: every label as a Mask in millimetres, kept up to date while painted.

A stroke makes new masks for the labels it touches and no others. A map too large to be looked
through between two frames is looked through in a thread; what is known meanwhile stays.
"""

from __future__ import annotations

import math
from contextlib import contextmanager
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from psygnal import Signal

from ct_measure_plugin.errors import CtMeasureError
from ct_measure_plugin.physics.label_regions import joined, label_boxes, label_mask, overlap
from ct_measure_plugin.viewer.drawn import Drawn
from ct_measure_plugin.viewer.following import Following
from ct_measure_plugin.viewer.label_grid import Grid, NoGrid, grid_of
from ct_measure_plugin.viewer.region_features import Tags, tags_on

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.physics.label_regions import Index
    from ct_measure_plugin.physics.regions import Mask
    from ct_measure_plugin.viewer.placement import Placement

__all__ = ["LabelRegions"]

#: Voxels looked through at once in the main thread: some 20 ms. More goes into a thread.
SOON = 4_000_000

#: Voxels of one stroke from which the whole map is looked through anew.
_LARGE_STROKE = 1_000_000


@dataclass(frozen=True, slots=True)
class _Known:
    """Where the labels lie and which voxels they hold."""

    boxes: dict[int, Index]
    masks: dict[int, Mask]


_NOTHING = _Known({}, {})


class LabelRegions:
    """The labels of a layer as regions.

    Tell it what happens to the layer (:meth:`stroke`, :meth:`painted`, :meth:`refreshed`,
    :meth:`replaced`), and ask for :meth:`drawn`.

    Parameters
    ----------
    layer : napari.layers.Labels
        2-D or 3-D; of more axes, the part at which the viewer stands.

    Signals
    -------
    changed()
        A look through the map in the background has ended.
    """

    changed = Signal()

    def __init__(self, layer: Any) -> None:
        self.layer = layer
        self._known = _NOTHING
        self._grid: Grid | NoGrid | None = None
        self._dirty: list[Index] = []
        self._all_dirty = True
        self._stand: tuple[float, ...] = ()
        self._quiet = False
        self._tags: tuple[int, dict[int, Tags]] = (0, {})
        self._drawn: dict[int, Drawn] = {}
        self._following = Following("Finding labels")
        self._following.answered.connect(self._found)

    # --- what happened to the layer -------------------------------------------------

    def stroke(self, event: Any) -> None:
        """Take note of a brush that moved; napari tells where in the slice shown."""
        shown = list(self.layer._slice_input.displayed)
        size = np.shape(event.data)
        if len(size) != len(shown):
            self.replaced()
            return
        whole = self.layer.n_edit_dimensions > len(shown)
        stand = self.layer.world_to_data(self._stand) if self._stand else None
        box = []
        for axis, n in enumerate(self.layer.data.shape):
            if axis in shown:
                place = shown.index(axis)
                first = int(event.offset[place])
                box.append(slice(first, first + int(size[place])))
            elif whole or stand is None:
                box.append(slice(0, n))
            else:
                at = min(max(round(float(stand[axis])), 0), n - 1)
                box.append(slice(at, at + 1))
        self._dirty.append(tuple(box))

    def painted(self, event: Any) -> None:
        """Take note of an edit that has ended: paint, fill, or numbers set by a program."""
        for atom in event.value:
            box = _box_of(atom)
            if box is None:
                self.replaced()
            else:
                self._dirty.append(box)

    def refreshed(self, point: Sequence[float]) -> None:
        """Take note of a redraw: after an undo, or because another slice is shown."""
        stand = tuple(float(v) for v in point)
        if stand == self._stand and not self._quiet:
            self.replaced()
        self._stand = stand

    def replaced(self) -> None:
        """Take note that anything may have changed."""
        self._all_dirty = True

    @contextmanager
    def quietly(self) -> Iterator[None]:
        """Redraw the layer without looking through it: only its looks change."""
        self._quiet = True
        try:
            yield
        finally:
            self._quiet = False

    # --- what is there --------------------------------------------------------------

    @property
    def busy(self) -> bool:
        """True while the map is looked through in the background."""
        return self._following.busy

    def close(self) -> None:
        """Stop what runs in the background."""
        self._following.cancel()

    def drawn(
        self, placement: Placement, point: Sequence[float], *, wait: bool = False
    ) -> tuple[Drawn, ...]:
        """Return every label as a region of an image layer's Volume.

        Parameters
        ----------
        placement : Placement
            The image layer measured.
        point : sequence of float
            Where the viewer stands (``viewer.dims.point``).
        wait : bool
            Look through the map now, however long it takes.
        """
        self._stand = tuple(float(v) for v in point)
        grid = grid_of(self.layer, placement, point)
        if self._grid is None or not grid.same_as(self._grid):
            self._all_dirty = True
        self._grid = grid
        if isinstance(grid, NoGrid):
            return (Drawn(0, self.layer.name, None, grid.problem),)
        if self._all_dirty or self._dirty:
            self._look(grid, wait=wait)
        return self._named(grid)

    def _look(self, grid: Grid, *, wait: bool) -> None:
        if self._following.busy:
            if not wait:
                return  # what has changed meanwhile comes next
            self._following.cancel()
            self._all_dirty = True
        data = grid.data_of(self.layer)
        dirty = [grid.inside(box) for box in self._dirty]
        known, change, count = self._known, None, data.size
        if not self._all_dirty and sum(_size(box) for box in dirty if box) <= _LARGE_STROKE:
            change = _Change.of(known, [box for box in dirty if box])
            count = change.count
        self._dirty, self._all_dirty = [], False
        if wait or (isinstance(data, np.ndarray) and count <= SOON):
            self._known = _look_through(data, grid, known, change)
        else:
            self._following.start(lambda _work: _look_through(data, grid, known, change))

    def _found(self, known: _Known) -> None:
        self._known = known
        self.changed.emit()

    def _named(self, grid: Grid) -> tuple[Drawn, ...]:
        """Return the labels with their names; those of which nothing has changed as they were."""
        masks = self._known.masks
        labels = sorted(masks)
        features = id(self.layer.features)
        if features != self._tags[0] or any(label not in self._tags[1] for label in labels):
            tags = zip(labels, tags_on(self.layer, labels), strict=True)
            self._tags, self._drawn = (features, dict(tags)), {}
        before, self._drawn = self._drawn, {}
        for label in labels:
            known = before.get(label)
            same = known is not None and known.region is masks[label]
            if known is None or not same or masks[label].z_mm != grid.z_mm:
                known = self._one(label, self._tags[1][label], grid)
            self._drawn[label] = known
        return tuple(self._drawn.values())

    def _one(self, label: int, tags: Tags, grid: Grid) -> Drawn:
        name, mask = tags.name or f"label {label}", self._known.masks[label]
        words = {"name": name, "z_mm": grid.z_mm, **tags.words()}
        try:
            if any(getattr(mask, word) != value for word, value in words.items()):
                self._known.masks[label] = mask = replace(mask, **words)
        except CtMeasureError as error:
            return Drawn(label, name, None, str(error), tags.group, tags.code)
        return Drawn(label, name, mask, "", tags.group, tags.code)


@dataclass(frozen=True, slots=True)
class _Change:
    """Where a map was edited, and how many voxels must be looked at for it.

    Each place is a box and the labels that have been near it.
    """

    places: list[tuple[Index, set[int]]]
    count: int

    @classmethod
    def of(cls, known: _Known, dirty: list[Index]) -> _Change:
        places = []
        for box in _merged(dirty):
            near = {label for label, own in known.boxes.items() if overlap(own, box)}
            places.append((box, near))
        touched: set[int] = set().union(*(near for _, near in places))
        count = sum(_size(known.boxes[label]) for label in touched)
        return cls(places, count + sum(_size(box) for box, _ in places))


def _merged(boxes: list[Index]) -> list[Index]:
    """Return boxes of which none overlap: the parts of a stroke become one."""
    found: list[Index] = []
    for box in boxes:
        merged, apart = box, []
        for other in found:
            if overlap(merged, other):
                merged = joined(merged, other)
            else:
                apart.append(other)
        found = [*apart, merged]
    return found


def _look_through(data: Any, grid: Grid, known: _Known, change: _Change | None) -> _Known:
    """Return what is known after a change, from the map alone; fit for any thread."""
    labels = np.asarray(data)
    boxes, masks = dict(known.boxes), dict(known.masks)
    touched: set[int] = set()
    if change is None:
        boxes = label_boxes(labels)
        touched = set(boxes)
        masks = {label: mask for label, mask in masks.items() if label in boxes}
    else:
        for box, near in change.places:
            present = near | {int(n) for n in np.unique(labels[box]) if n != 0}
            for label in present:
                boxes[label] = joined(boxes[label], box) if label in boxes else box
            touched |= present
    for label in touched:
        mask = label_mask(
            labels, label, boxes[label],
            spacing_mm=grid.spacing_mm, origin_mm=grid.origin_mm, z_mm=grid.z_mm,
        )  # fmt: skip
        if mask is None:
            boxes.pop(label)
            masks.pop(label, None)
        elif not _same(mask, masks.get(label)):
            masks[label] = mask
            boxes[label] = grid.box_of(mask)
    return _Known(boxes, masks)


def _same(one: Mask, other: Mask | None) -> bool:
    """Tell whether two masks hold the same voxels: then the older one is kept, and its answer."""
    return (
        other is not None
        and one.spacing_mm == other.spacing_mm
        and one.origin_mm == other.origin_mm
        and np.array_equal(one.inside, other.inside)
    )


def _size(box: Index) -> int:
    return math.prod(part.stop - part.start for part in box)


def _box_of(atom: Any) -> Index | None:
    """Return where an entry of napari's history lies, None if it does not say."""
    box = getattr(atom, "slice_key", None)
    if box is not None:
        return tuple(box)
    indices = atom[0] if isinstance(atom, tuple) and len(atom) == 3 else None
    if not isinstance(indices, tuple):
        return None
    parts: list[NDArray[Any]] = [np.atleast_1d(np.asarray(one)) for one in indices]
    if not parts or any(part.dtype.kind not in "iu" or not part.size for part in parts):
        return None
    return tuple(slice(int(part.min()), int(part.max()) + 1) for part in parts)
