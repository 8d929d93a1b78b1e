"""Layers to draw regions on, each lying just where the image lies."""

from __future__ import annotations

from typing import Any

from ct_measure_plugin.viewer.layer_geometry import lying_like
from ct_measure_plugin.viewer.region_drawing import new_labels_layer
from ct_measure_plugin.viewer.shapes import new_regions_layer

__all__ = ["layer_to_draw_on", "new_points_layer"]

#: Diameter of a new point, in the image's pixels.
_DIAMETER = 20


def new_points_layer(viewer: Any, image: Any, name: str = "Points") -> Any:
    """Add an empty Points layer that lies just where an image layer lies, and return it."""
    layer = viewer.add_points(
        ndim=image.ndim,
        name=name,
        size=_DIAMETER,
        **lying_like(image),
        face_color="transparent",
        border_color="#ffb000",
    )
    layer.current_size = _DIAMETER
    return layer


def layer_to_draw_on(viewer: Any, image: Any, kind: str, chosen: Any = None) -> Any:
    """Return the layer to draw on: the chosen one if it is of the kind, else a new one.

    Parameters
    ----------
    viewer : ViewerModel
        Where it is shown.
    image : Image
        What is drawn over.
    kind : {"shapes", "points", "labels"}
        Of layer.
    chosen : layer, optional
        The layer in use.
    """
    if type(chosen).__name__.lower() == kind:
        return chosen
    make = {
        "shapes": new_regions_layer,
        "points": new_points_layer,
        "labels": new_labels_layer,
    }
    return make[kind](viewer, image)
