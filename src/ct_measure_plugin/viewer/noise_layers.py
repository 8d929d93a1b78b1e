"""The local noise of a whole image as a layer beside it; no Qt."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.physics.local_sd import checked_window, local_sd
from ct_measure_plugin.viewer.layer_geometry import lying_like
from ct_measure_plugin.viewer.layers import layer_of

if TYPE_CHECKING:
    from ct_measure_plugin.physics.volume import Volume
    from ct_measure_plugin.viewer.placement import Placement
    from ct_measure_plugin.viewer.tasks import Work

__all__ = ["add_local_noise", "local_noise"]

#: Colours run from 0 to so many times the median: noise, and what is louder.
_TOP = 2.5


def local_noise(placement: Placement, window_px: int, work: Work) -> Volume:
    """Return the SD in a window around every pixel, NaN where the window leaves the image.

    For a thread, as it touches no layer.

    Raises
    ------
    ArgumentError
        If the window is not odd or does not fit.
    Cancelled
        If it was stopped.
    """
    volume = placement.volume
    checked_window(window_px, volume.shape)
    values = np.empty(volume.shape, np.float32)
    for k in range(len(values)):
        work.stop_if_asked()
        work.progress(k, len(values))
        plane = volume.plane(k)
        values[k] = local_sd(plane, window_px=window_px)
        padding = volume.padding(k, plane)
        if padding is not None:
            values[k][padding] = np.nan
    return replace(volume, hu=values, padding_hu=None, representable_hu=None)


def add_local_noise(viewer: Any, placement: Placement, found: Volume) -> Any:
    """Add the local noise of an image layer as a layer that lies where it lies, and return it."""
    data, attributes, _ = layer_of(found, f"Local SD of {placement.layer.name}")
    attributes |= lying_like(placement.layer)
    finite = found.hu[np.isfinite(found.hu) & (found.hu > 0)]
    top = _TOP * float(np.median(finite)) if finite.size else 1.0
    attributes |= {"contrast_limits": (0.0, top), "colormap": "viridis"}
    return viewer.add_image(data, **attributes)
