"""napari Image layers and Volumes: units, axis order and position, settled here and nowhere else.

A layer's world and a Volume's image frame are the same millimetres whenever the layer's axes are
the world's axes, in mm. Where they are not (mirrored, turned, in other units, pixel size entered
by hand), a :class:`Placement` says how they meet. Always go through it:

- ``placement.frame_of(world)``: where a point of the viewer lies in the Volume, mm;
- ``placement.world_of(frame)``: the way back;
- ``placement.plane_of(world)``: the slice that the viewer shows at a point.

Along z the frame follows the Volume's own slice positions. napari draws slices evenly, so on an
unevenly spaced series the world's z is that of an even stack and the frame's is the true one.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.volume import Source, Volume
from ct_measure_plugin.physics.windowing import limits_of
from ct_measure_plugin.viewer.layer_cautions import spacing_caution, tilt_caution, unit_caution
from ct_measure_plugin.viewer.layer_geometry import geometry_of, world_in_mm, world_of_layer
from ct_measure_plugin.viewer.placement import Placement

if TYPE_CHECKING:
    from collections.abc import Sequence

    from napari.layers import Image
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]
    LayerTuple = tuple[Any, dict[str, Any], str]

__all__ = [
    "KEY",
    "Asked",
    "Placement",
    "contrast_limits_for",
    "is_ct",
    "layer_of",
    "own_volume",
    "placement_of",
    "questions_for",
    "shows_slab",
    "volume_of",
]

#: Our one key in a layer's metadata; it holds the Volume.
KEY = "ct_measure_plugin"

#: The soft-tissue window (common practice) shown where the header offers none.
_PLAIN_WINDOW = (50.0, 400.0)

#: A stack that leans by more than this is said to; less is rounding in a stored affine.
_LEANING_DEG = 0.1


@dataclass(frozen=True, slots=True)
class Asked:
    """What a person told us about a layer that does not say it itself.

    Attributes
    ----------
    spacing_mm : (float, float, float) or None
        dz, dy, dx of one voxel; None if not entered.
    unit : str
        What the values are: "HU", or another unit, or "" for unknown.
    """

    spacing_mm: tuple[float, float, float] | None = None
    unit: str = "HU"


# --- from a Volume to a layer ---------------------------------------------------------


def layer_of(volume: Volume, name: str = "") -> LayerTuple:
    """Return the data, attributes and type of a layer that shows a Volume.

    Parameters
    ----------
    volume : Volume
        Shown as it is: nothing is resampled, a lazy array stays lazy.
    name : str, optional
        The layer's name; the Volume's title by default.

    Returns
    -------
    (array, dict, "image")
        As a napari reader returns it. Millimetres, axes z, y, x; `projection_mode` is "none", so
        that the canvas shows one slice and never the mean of several.
    """
    attributes = {
        "name": name or volume.source.title or "CT",
        "scale": volume.spacing_mm,
        "translate": volume.origin_mm,
        "units": "mm",
        "axis_labels": ("z", "y", "x"),
        "contrast_limits": contrast_limits_for(volume),
        "rgb": False,
        "colormap": "gray",
        "projection_mode": "none",
        "metadata": {KEY: volume},
    }
    return volume.hu, attributes, "image"


def contrast_limits_for(volume: Volume) -> tuple[float, float]:
    """Return the limits to open a Volume with.

    The header's first window if it is linear, else the soft-tissue window for HU, else the range
    of the middle slice.
    """
    for window in volume.windows:
        if window.function != "SIGMOID":
            return limits_of(window.centre, window.width, window.function)
    if volume.is_hu:
        return limits_of(*_PLAIN_WINDOW)
    middle = volume.plane(volume.shape[0] // 2)
    finite = middle[np.isfinite(middle)]
    low, high = (float(finite.min()), float(finite.max())) if finite.size else (0.0, 1.0)
    return (low, high) if low < high else (low, low + 1.0)


# --- from a layer to a Volume ---------------------------------------------------------


def own_volume(layer: Any) -> Volume | None:
    """Return the Volume that we put into a layer, None if it is not one of ours."""
    found = layer.metadata.get(KEY)
    return found if isinstance(found, Volume) else None


def is_ct(layer: Any) -> bool:
    """Tell whether a layer shows CT numbers: opened by us and in HU."""
    volume = own_volume(layer)
    return volume is not None and volume.is_hu


def questions_for(layer: Image) -> tuple[str, ...]:
    """Return what a person must say before a layer is measured: "spacing", "unit", both or neither.

    The spacing must be entered where an axis has no unit of length; the unit of the values has the
    answer "HU" until someone says otherwise, and every result says that it was assumed.
    """
    if _unchanged(layer) is not None:
        return ()
    questions = () if world_in_mm(layer) is not None else ("spacing",)
    return questions if own_volume(layer) is not None else (*questions, "unit")


def shows_slab(layer: Image, dims: Any) -> bool:
    """Tell whether the canvas shows several slices projected into one, not the slice measured."""
    axis = -3
    if layer.ndim < 3 or str(layer.projection_mode) == "none" or dims.ndisplay != 2:
        return False
    return float(dims.margin_left[axis]) + float(dims.margin_right[axis]) > 0


def volume_of(
    layer: Image, asked: Asked | None = None, *, point: Sequence[float] | None = None
) -> Volume:
    """Return the Volume that a layer shows; see :func:`placement_of`."""
    return placement_of(layer, asked, point=point).volume


def placement_of(
    layer: Image, asked: Asked | None = None, *, point: Sequence[float] | None = None
) -> Placement:
    """Return a layer's Volume and where it lies in the viewer's world.

    Parameters
    ----------
    layer : Image
        Any image layer of the viewer, opened by us or not: flat or deep, in any unit of length or
        in pixels, mirrored, turned by its affine, multiscale (the finest level is taken), lazy.
    asked : Asked, optional
        What a person said about it; see :func:`questions_for`.
    point : sequence of float, optional
        Where the viewer stands (``viewer.dims.point``); needed for layers of more than three axes,
        whose first axes are held there.

    Raises
    ------
    ArgumentError
        If the layer is coloured, has too few or too many axes, is in pixels and no spacing was
        entered, or its rows and columns are not at right angles.
    """
    _check_kind(layer)
    unchanged = _unchanged(layer)
    if unchanged is not None:
        return Placement(unchanged, layer, data=layer.data)
    asked = Asked() if asked is None else asked
    data, leading = _finest_data(layer, point)
    spacing, origin, tilt, by_hand = geometry_of(layer, asked.spacing_mm)
    own = own_volume(layer)
    cautions = [*(own.cautions if own is not None else ())]
    if by_hand:
        cautions.append(spacing_caution(spacing))
    if tilt > _LEANING_DEG:
        cautions.append(tilt_caution(tilt))
    if own is None:
        cautions.append(unit_caution(asked.unit))
    volume = Volume(
        data,
        spacing_mm=spacing,
        origin_mm=origin,
        tilt_deg=tilt,
        unit=own.unit if own is not None else asked.unit,
        cautions=tuple(cautions),
        source=replace(
            Source(title=layer.name) if own is None else own.source,
            spacing_source="entered by hand" if by_hand else "napari layer",
        ),
    )
    if own is not None:
        volume = _carried_over(own, volume)
    return Placement(volume, layer, leading, layer.data)


def _check_kind(layer: Image) -> None:
    if getattr(layer, "rgb", False):
        raise ArgumentError("layer", "must hold CT numbers, not colours", f"RGB '{layer.name}'")
    if layer.ndim < 2:
        raise ArgumentError("layer", "must have two or three axes", layer.ndim)


def _finest_data(layer: Image, point: Sequence[float] | None) -> tuple[Any, tuple[int, ...]]:
    data = layer.data[0] if layer.multiscale else layer.data
    extra = layer.ndim - 3
    if extra <= 0:
        return data, ()
    if point is None:
        raise ArgumentError(
            "layer", "must have three axes, or the viewer must say where it stands", layer.ndim
        )
    where = layer.world_to_data(point)[:extra]
    leading = tuple(
        min(max(round(float(v)), 0), size - 1)
        for v, size in zip(where, data.shape[:extra], strict=True)
    )
    return data[leading], leading


def _unchanged(layer: Image) -> Volume | None:
    """Return our own Volume if the layer still shows just that, in the same place."""
    own = own_volume(layer)
    if own is None or layer.multiscale or layer.data is not own.hu:
        return None
    matrix, shift, factors = world_of_layer(layer)
    if factors is None:
        return None
    same = np.allclose(matrix * factors[:, None], np.diag(own.spacing_mm), rtol=1e-9, atol=1e-12)
    return own if same and np.allclose(shift * factors, own.origin_mm, atol=1e-9) else None


def _carried_over(own: Volume, found: Volume) -> Volume:
    """Return a changed layer's Volume with what our own still says about it."""
    if found.shape != own.shape:
        return found
    return replace(
        found,
        padding_hu=own.padding_hu,
        representable_hu=own.representable_hu,
        acquisition=own.acquisition,
        windows=own.windows,
    )
