"""What can be done to regions from a dock, each with its undo: the layers' side of the buttons."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from ct_measure_plugin.errors import ArgumentError, CtMeasureError
from ct_measure_plugin.physics.regions import Ellipsoid
from ct_measure_plugin.viewer import arranging
from ct_measure_plugin.viewer.layer_frame import LayerFrame
from ct_measure_plugin.viewer.outlines import Outline, add_outlines, outlines_of, put
from ct_measure_plugin.viewer.region_drawing import (
    new_labels_layer,
    outline_of,
    row_of,
    voxels_of,
)
from ct_measure_plugin.viewer.region_features import (
    CLASS,
    CODE,
    ELLIPSOID,
    HIGH,
    LOW,
    NAME,
    SWEPT,
    Z_HIGH,
    Z_LOW,
    ids_on,
    set_column,
    tags_on,
)
from ct_measure_plugin.viewer.region_source import LabelSource
from ct_measure_plugin.viewer.undo import Undo, change_outlines, change_voxels

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Sequence

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.viewer.placement import Placement
    from ct_measure_plugin.viewer.region_board import RegionBoard

__all__ = ["RegionActs"]

Point = tuple[float, float]


class RegionActs:
    """Deletes, moves, copies and adds regions on a board's layer.

    Parameters
    ----------
    board : RegionBoard
        Whose layer and first image are meant; it must have been looked at.
    viewer : ViewerModel
        Where it is shown.

    Attributes
    ----------
    undo : Undo
        What was done.
    """

    def __init__(self, board: RegionBoard, viewer: Any) -> None:
        self._board = board
        self._viewer = viewer
        self.undo = Undo()

    # --- taking away and moving -----------------------------------------------------

    def delete(self, indices: Sequence[int]) -> None:
        """Take regions away; of a Labels layer, give their voxels to the background."""
        layer = self._layer()
        words = f"delete {_count(indices)}"
        if isinstance(self._board.source, LabelSource):
            where = _joined([np.nonzero(np.asarray(layer.data) == label) for label in indices])
            self.undo.done(change_voxels(layer, words, where, 0))
            return
        self._change(words, indices, lambda: layer.remove(list(indices)))

    def shift(self, indices: Sequence[int], by_mm: Point) -> None:
        """Move regions by (y, x) mm."""
        self._move(f"move {_count(indices)}", indices, lambda f, o: arranging.shift(f, o, by_mm))

    def mirror(
        self,
        indices: Sequence[int],
        across: Literal["vertical", "horizontal"],
        about: Literal["image", "regions"],
        *,
        keep: bool,
    ) -> None:
        """Mirror regions across a line through the image's or their own middle.

        Parameters
        ----------
        indices : sequence of int
            Which.
        across : {"vertical", "horizontal"}
            The line.
        about : {"image", "regions"}
            Whose middle it goes through.
        keep : bool
            Whether the originals stay, so that copies are made.
        """
        frame = self._frame()
        outlines = self._outlines(indices)
        middle = self.middle() if about == "image" else arranging.centre_of(frame, outlines)
        words = f"mirror {_count(indices)}"
        if keep:
            self._add(words, indices, arranging.mirror(frame, outlines, middle, across))
        else:
            self._move(words, indices, lambda f, o: arranging.mirror(f, o, middle, across))

    # --- copying --------------------------------------------------------------------

    def array(self, indices: Sequence[int], rows: int, columns: int, step_mm: Point) -> None:
        """Complete regions to rows and columns."""
        made = arranging.array(self._frame(), self._outlines(indices), rows, columns, step_mm)
        self._add(f"array {_count(indices)}", indices, made)

    def ring(self, indices: Sequence[int], count: int, about_mm: Point, *, turned: bool) -> None:
        """Complete regions to a ring around a point."""
        outlines = self._outlines(indices)
        made = arranging.ring(self._frame(), outlines, count, about_mm, turned=turned)
        self._add(f"ring of {_count(indices)}", indices, made)

    def to_slices(self, indices: Sequence[int], first: int, last: int) -> None:
        """Copy regions to slices, counted from 0, both ends included."""
        slices = range(min(first, last), max(first, last) + 1)
        made = arranging.on_slices(self._frame(), self._outlines(indices), slices)
        self._add(f"copy {_count(indices)} to slices", indices, made)

    def to_layer(self, indices: Sequence[int], layer: Any) -> None:
        """Copy regions to another Shapes or Points layer, where they lie just as here."""
        placement = self._placement()
        other = LayerFrame(layer, placement, self._viewer.dims.point)
        made = arranging.onto(self._frame(), other, self._outlines(indices))
        words = f"copy {_count(indices)} to {layer.name}"
        self.undo.done(change_outlines(layer, words, (), lambda: add_outlines(layer, made)))

    # --- adding ---------------------------------------------------------------------

    def add(self, regions: Sequence[Region], words: str = "") -> None:
        """Draw regions given in mm."""
        frame = self._frame()
        outlines = [outline_of(region, frame) for region in regions]
        self._add(words or f"add {_count(regions)}", (), outlines)
        layer = self._layer()
        layer.selected_data = set(range(len(layer.data) - len(outlines), len(layer.data)))

    def reshape_chosen(self, indices: Sequence[int], region: Region) -> None:
        """Give the one chosen region another outline, on the slice that it is on.

        Raises
        ------
        ArgumentError
            If none or several are chosen.
        """
        if len(indices) != 1:
            raise ArgumentError("regions", "must be one, chosen in the list", len(indices))
        now = self._board.region(indices[0])
        if isinstance(now, Ellipsoid) and isinstance(region, Ellipsoid):
            z = now.z_mm
        else:
            frame = self._frame()
            [outline] = self._outlines(indices)
            k = round(float(frame.voxels(outline.corners)[:, 0].mean()))
            positions = frame.placement.volume.positions_mm
            z = float(positions[min(max(k, 0), len(positions) - 1)])
        self.reshape(indices[0], replace(region, z_mm=z))

    def reshape(self, index: int, region: Region) -> None:
        """Give a region on the layer another outline, in mm; name and class stay its own."""
        layer = self._layer()
        new = outline_of(region, self._frame())
        [(number, old)] = outlines_of(layer, [index]).items()
        moved = Outline(new.corners, new.kind, old.looks)
        self._change(f"reshape {_count([index])}", [index], lambda: put(layer, {number: moved}))
        if isinstance(region, Ellipsoid):
            self.reach([index], new.features[Z_LOW], new.features[Z_HIGH], ELLIPSOID)
        else:
            set_column(layer, SWEPT, {index: ""})

    def reach(self, indices: Sequence[int], low_mm: float, high_mm: float, swept: str = "") -> None:
        """Let regions reach over a range of slices, as a cylinder or swept to an ellipsoid."""
        for column, value in ((Z_LOW, low_mm), (Z_HIGH, high_mm), (SWEPT, swept)):
            set_column(self._layer(), column, dict.fromkeys(indices, value))

    def reach_slices(
        self, indices: Sequence[int], first: int, last: int, *, swept: bool = False
    ) -> None:
        """Let regions reach from one slice to another, counted from 0."""
        positions = self._placement().volume.positions_mm
        low, high = sorted(min(max(k, 0), len(positions) - 1) for k in (first, last))
        ends = float(positions[low]), float(positions[high])
        self.reach(indices, *ends, ELLIPSOID if swept else "")

    def slices_of(self, index: int) -> tuple[int, int] | None:
        """Return the first and the last slice that a region was told to reach over, or None."""
        tags = tags_on(self._layer())
        low, high = tags[index].z_mm if index < len(tags) else (math.nan, math.nan)
        if math.isnan(low) and math.isnan(high):
            return None
        positions = self._placement().volume.positions_mm
        known = np.clip([low, high], positions[0], positions[-1])
        first, last = (int(np.argmin(np.abs(positions - z))) for z in known)
        return first, last

    def count(self, indices: Sequence[int], low: float, high: float) -> None:
        """Let only a range of values count within regions; NaN for an open end."""
        source = self._board.source
        if source is not None:
            source.write(LOW, dict.fromkeys(indices, low))
            source.write(HIGH, dict.fromkeys(indices, high))

    def to_labels(self, indices: Sequence[int], layer: Any = None) -> Any:
        """Paint regions as labels: one more than the highest there, in order; return the layer.

        Names, classes and codes go with them. Without a layer, one is added over the image.
        """
        placement = self._placement()
        regions = [self._board.region(index) for index in indices]
        if not any(region is not None for region in regions):
            raise ArgumentError("regions", "must be chosen in the list first", 0)
        made = layer is None
        layer = new_labels_layer(self._viewer, placement.layer) if made else layer
        point = self._viewer.dims.point
        try:
            places = [
                voxels_of(region, layer, placement, point)
                for region in regions
                if region is not None
            ]
        except CtMeasureError:
            if made:
                self._viewer.layers.remove(layer)
            raise
        first = int(np.max(layer.data, initial=0)) + 1
        if first + len(places) - 1 > np.iinfo(layer.data.dtype).max:
            raise ArgumentError("labels", "must have room for more labels", str(layer.data.dtype))
        numbers = np.concatenate(
            [np.full(len(place[0]), first + i) for i, place in enumerate(places)] or [np.zeros(0)]
        )
        words = f"paint {_count(places)}"
        self.undo.done(change_voxels(layer, words, _joined(places), numbers))
        keys = list(range(first, first + len(places)))
        rows = [row_of(region) for region in regions if region is not None]
        for column in (NAME, CLASS, CODE):
            values = {key: row[column] for key, row in zip(keys, rows, strict=True)}
            set_column(layer, column, values, keys=keys)
        return layer

    def middle(self) -> Point:
        """Return the middle (y, x) of the image, mm."""
        volume = self._placement().volume
        _, ny, nx = volume.shape
        (_, dy, dx), (_, y, x) = volume.spacing_mm, volume.origin_mm
        return y + dy * (ny - 1) / 2, x + dx * (nx - 1) / 2

    def here(self) -> float:
        """Return the z of the slice shown, mm."""
        placement = self._placement()
        point = tuple(self._viewer.dims.point)[-placement.layer.ndim :]
        return float(placement.volume.positions_mm[placement.plane_of(point)])

    # --- inside ---------------------------------------------------------------------

    def _layer(self) -> Any:
        source = self._board.source
        if source is None:
            raise ArgumentError("layer", "must be chosen first", None)
        return source.layer

    def _placement(self) -> Placement:
        placement = self._board.placement()
        if placement is None:
            raise ArgumentError("image", "must be chosen first", None)
        return placement

    def _frame(self) -> LayerFrame:
        layer = self._layer()
        if isinstance(self._board.source, LabelSource):
            raise ArgumentError("layer", "must hold shapes or points for this", "labels")
        return LayerFrame(layer, self._placement(), self._viewer.dims.point)

    def _outlines(self, indices: Sequence[int]) -> list[Outline]:
        if not indices:
            raise ArgumentError("regions", "must be chosen in the list first", 0)
        return list(outlines_of(self._layer(), indices).values())

    def _move(
        self,
        words: str,
        indices: Sequence[int],
        way: Callable[[LayerFrame, Sequence[Outline]], list[Outline]],
    ) -> None:
        frame, layer = self._frame(), self._layer()
        known = outlines_of(layer, indices)
        if not known:
            raise ArgumentError("regions", "must be chosen in the list first", 0)
        moved = dict(zip(known, way(frame, list(known.values())), strict=True))
        self._change(words, indices, lambda: put(layer, moved))

    def _add(self, words: str, indices: Sequence[int], made: Sequence[Outline]) -> None:
        layer = self._layer()
        ids_on(layer)
        self.undo.done(change_outlines(layer, words, indices, lambda: add_outlines(layer, made)))

    def _change(self, words: str, indices: Sequence[int], act: Callable[[], Any]) -> None:
        def run() -> Iterable[int]:
            act()
            return ()

        self.undo.done(change_outlines(self._layer(), words, indices, run))


def _count(some: Sequence[Any]) -> str:
    return "1 region" if len(some) == 1 else f"{len(some)} regions"


def _joined(places: Sequence[tuple[Any, ...]]) -> tuple[Any, ...]:
    if not places:
        raise ArgumentError("regions", "must be chosen in the list first", 0)
    return tuple(np.concatenate(axes) for axes in zip(*places, strict=True))
