"""A Picture as an image layer, where its axes are millimetres like the viewer's own."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from ct_measure_plugin.physics.results import Picture

__all__ = ["add_picture", "can_be_layer"]


def can_be_layer(picture: Picture) -> bool:
    """Tell whether a picture can lie among layers in millimetres; one over frequencies cannot."""
    return all(unit == "mm" for unit in picture.axis_units)


def add_picture(viewer: Any, picture: Picture, name: str) -> Any:
    """Add a picture as a flat image layer, and return the layer.

    Values that are no number are left out of the contrast limits.
    """
    values = np.asarray(picture.values, dtype=float)
    finite = values[np.isfinite(values)]
    low, high = (float(finite.min()), float(finite.max())) if finite.size else (0.0, 1.0)
    return viewer.add_image(
        values,
        name=name,
        scale=picture.spacing,
        translate=picture.origin,
        units="mm",
        axis_labels=("y", "x"),
        contrast_limits=(low, high if high > low else low + 1.0),
        colormap="viridis",
        rgb=False,
        metadata={"unit": picture.unit},
    )
