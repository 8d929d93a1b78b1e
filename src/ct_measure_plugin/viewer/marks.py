"""What was found, drawn over the image: an edge, a circle, the patches; on a layer of vectors.

Vectors, not shapes: so the layer never stands among the regions to choose from, and is redrawn
whole at little cost. It lies just where the image lies.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.physics.coverage import slices_of
from ct_measure_plugin.physics.regions import Disc, Ellipse, Path, Segment, direction
from ct_measure_plugin.viewer.layer_geometry import lying_like
from ct_measure_plugin.viewer.shapes import shape_of

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.viewer.layers import Placement

    Floats = NDArray[np.float64]

__all__ = ["COLOUR", "MOST", "Marks", "outline_of", "strokes_of"]

#: Apart from the regions' amber for every reader: the theme's first line colour.
COLOUR = "#56B4E9"

#: Strokes drawn at most; napari redraws this many in a few milliseconds.
MOST = 6000

#: Strokes that make a circle.
_ROUND = 72


def outline_of(region: Region) -> tuple[Floats, bool]:
    """Return points (n, 2) along a region's outline, mm, and whether it closes.

    A region without an outline gives none.
    """
    if isinstance(region, Segment):
        return np.asarray([region.start_mm, region.end_mm]), False
    if isinstance(region, Path):
        return np.asarray(region.vertices_mm), False
    if isinstance(region, Disc):
        region = Ellipse(region.center_mm, (region.radius_mm,) * 2)
    if isinstance(region, Ellipse):
        turn = np.linspace(0, 2 * math.pi, _ROUND, endpoint=False)[:, None]
        along, across = (np.asarray(direction(region.angle_deg + a)) for a in (0.0, 90.0))
        b, a = region.radii_mm
        middle = np.asarray(region.center_mm)
        return middle + a * np.cos(turn) * along + b * np.sin(turn) * across, True
    try:
        return shape_of(region)[0], True
    except ValueError:
        return np.zeros((0, 2)), False


def strokes_of(regions: Iterable[Region], placement: Placement) -> Floats:
    """Return strokes, shape (n, 2, ndim), starts and steps in the image layer's own pixels.

    Each region is drawn on every slice it lies on.
    """
    volume, deep = placement.volume, placement.layer.ndim > 2
    found = []
    for region in regions:
        points, closed = outline_of(region)
        if len(points) < 2:
            continue
        flat = (points - np.asarray(volume.origin_mm[1:])) / np.asarray(volume.spacing_mm[1:])
        steps = np.roll(flat, -1, axis=0) - flat
        strokes = np.stack([flat, steps], axis=1)[: None if closed else -1]
        slices = slices_of(region, volume)
        found += [_on_slice(strokes, k, placement) if deep else strokes for k in slices]
        if sum(len(one) for one in found) > MOST:
            break
    ndim = placement.layer.ndim
    return np.concatenate(found)[:MOST] if found else np.zeros((0, 2, ndim))


def _on_slice(strokes: Floats, k: int, placement: Placement) -> Floats:
    """Give strokes their place along the axes before y."""
    before = np.zeros((len(strokes), 2, placement.layer.ndim - 2))
    before[:, 0] = (*placement.leading, k)
    return np.concatenate([before, strokes], axis=2)


class Marks:
    """The layer of one dock's marks; made when there is something to show.

    Parameters
    ----------
    viewer : ViewerModel
        Where to draw.
    name : str
        What the layer is called.
    """

    def __init__(self, viewer: Any, name: str) -> None:
        self._viewer, self._name = viewer, name
        self._layer: Any = None
        self._image: Any = None

    @property
    def layer(self) -> Any:
        """The layer, None while there is none."""
        if self._layer is not None and self._layer not in self._viewer.layers:
            self._layer = None  # someone removed it
        return self._layer

    def show(self, regions: Sequence[Region], placement: Placement) -> None:
        """Draw other marks on an image layer."""
        strokes = strokes_of(regions, placement)
        if self.layer is not None and self._image is not placement.layer:
            self.clear()
        if self.layer is None:
            if len(strokes):
                self._add(strokes, placement.layer)
        elif not np.array_equal(self._layer.data, strokes):
            self._layer.data = strokes

    def clear(self) -> None:
        """Take the layer away."""
        layer = self.layer
        self._layer = self._image = None
        if layer is not None:
            self._viewer.layers.remove(layer)

    def _add(self, strokes: Floats, image: Any) -> None:
        """Add the layer over the image; what was selected stays selected, drawing goes on."""
        layers = self._viewer.layers
        selected, active = set(layers.selection), layers.selection.active
        modes = {one: one.mode for one in layers if hasattr(one, "mode")}
        self._layer = self._viewer.add_vectors(
            strokes,
            name=self._name,
            **lying_like(image),
            edge_color=COLOUR,
            edge_width=0.7,
            vector_style="line",
            opacity=1.0,
        )
        self._image = image
        images = [place for place, one in enumerate(layers) if hasattr(one, "contrast_limits")]
        layers.move(layers.index(self._layer), max(images) + 1)  # over every image, under regions
        layers.selection = selected
        layers.selection.active = active
        for layer, mode in modes.items():
            if layer.mode != mode:
                layer.mode = mode
