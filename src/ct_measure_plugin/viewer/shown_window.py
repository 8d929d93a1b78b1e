"""Which window a napari layer shows, and how to make it show another.

napari spreads greys evenly between two contrast limits. That is LINEAR and LINEAR_EXACT, to the
last bit. A sigmoid is no straight ramp: it is put into the layer's colour map, 1025 points along
limits two widths either side of the centre, and so shown truly.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from ct_measure_plugin.physics.volume import HeaderWindow
from ct_measure_plugin.physics.windowing import limits_of, sigmoid_ramp, window_of

if TYPE_CHECKING:
    from ct_measure_plugin.physics.windowing import WindowFunction

__all__ = ["is_sigmoid", "show_window", "shown_window"]

_MARK = " · sigmoid"


def is_sigmoid(layer: Any) -> bool:
    """Tell whether a layer's colour map holds a sigmoid of ours."""
    return str(layer.colormap.name).endswith(_MARK)


def shown_window(layer: Any, function: WindowFunction = "LINEAR") -> HeaderWindow:
    """Return the window that a layer shows.

    Parameters
    ----------
    layer : Image
        Any image layer.
    function : {"LINEAR", "LINEAR_EXACT"}
        How to state it where the layer shows an even ramp, which both are.
    """
    if is_sigmoid(layer):
        function = "SIGMOID"
    elif function == "SIGMOID":
        function = "LINEAR"
    low, high = (float(limit) for limit in layer.contrast_limits)
    centre, width = window_of(low, high, function)
    return HeaderWindow(centre, width, "", function)


def show_window(layer: Any, centre: float, width: float, function: WindowFunction) -> None:
    """Make a layer show a window; its data are not touched.

    Raises
    ------
    ArgumentError
        If there is no such window.
    """
    limits = limits_of(centre, width, function)
    if (function == "SIGMOID") != is_sigmoid(layer):
        layer.colormap = _with_sigmoid(layer) if function == "SIGMOID" else _without_sigmoid(layer)
    if tuple(float(limit) for limit in layer.contrast_limits) != limits:
        layer.contrast_limits = limits


def _with_sigmoid(layer: Any) -> Any:
    import numpy as np
    from napari.utils import Colormap

    ramp = sigmoid_ramp()
    return Colormap(
        colors=layer.colormap.map(ramp),
        controls=np.linspace(0, 1, len(ramp)),
        name=layer.colormap.name + _MARK,
        display_name=layer.colormap.name + _MARK,
    )


def _without_sigmoid(layer: Any) -> str:
    return str(layer.colormap.name).removesuffix(_MARK)
