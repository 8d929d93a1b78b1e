"""The difference of two scans as a layer to measure noise on; no Qt."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from ct_measure_plugin.physics.scan_difference import scan_difference
from ct_measure_plugin.viewer.layers import layer_of

if TYPE_CHECKING:
    from ct_measure_plugin.physics.volume import Volume
    from ct_measure_plugin.viewer.placement import Placement

__all__ = ["add_difference", "difference"]

#: Where the difference lies is where the first scan lies.
_PLACE = ("scale", "translate", "rotate", "shear", "affine", "units", "axis_labels")

#: Grey runs over so many HU, which shows noise.
_WINDOW = (-50.0, 50.0)


def difference(first: Placement, second: Placement) -> Volume:
    """Return (first − second)/√2; for a thread, as it touches no layer.

    Raises
    ------
    ArgumentError
        If the two are not on one grid.
    """
    return scan_difference(first.volume, second.volume)


def add_difference(viewer: Any, first: Placement, second: Placement, found: Volume) -> Any:
    """Add the difference of two image layers as a layer, and return it."""
    name = f"({first.layer.name} − {second.layer.name})/√2"
    data, attributes, _ = layer_of(found, name)
    own = first.layer
    attributes |= {key: getattr(own, key) for key in _PLACE}
    attributes["contrast_limits"] = _WINDOW
    return viewer.add_image(data, **attributes)
