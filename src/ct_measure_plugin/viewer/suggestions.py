"""Regions that would measure an MTF or the noise well, found on the slice shown; no Qt."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from ct_measure_plugin.measurements import find
from ct_measure_plugin.measurements.targets import targets_on
from ct_measure_plugin.measurements.uniform_place import uniform_place
from ct_measure_plugin.viewer.layer_frame import LayerFrame
from ct_measure_plugin.viewer.outlines import add_outlines
from ct_measure_plugin.viewer.region_drawing import outline_of
from ct_measure_plugin.viewer.shapes import new_regions_layer

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.regions import Disc, Region
    from ct_measure_plugin.physics.results import NotMeasured
    from ct_measure_plugin.physics.targets import TargetsFound
    from ct_measure_plugin.viewer.placement import Placement

__all__ = [
    "counted",
    "draw_suggested",
    "draw_targets",
    "reasons",
    "search",
    "search_uniform",
    "suits",
]

_WORDS = {"edge": "straight edge", "rod": "round edge", "wire": "wire or bead"}
_MANY = {"edge": "straight edges", "rod": "round edges", "wire": "wires or beads"}


def search(placement: Placement, point: Sequence[float]) -> TargetsFound:
    """Return what the slice shown offers; for a thread, as it touches no layer.

    Parameters
    ----------
    placement : Placement
        The image layer.
    point : sequence of float
        Where the viewer stands.
    """
    k = placement.plane_of(tuple(point)[-placement.layer.ndim :])
    return targets_on(placement.volume, k)


def suits(found: TargetsFound) -> dict[str, int]:
    """Return how many targets suit each measurement, by its name, the best target's first."""
    counts: dict[str, int] = {}
    for target in found.targets:
        counts[target.measurement] = counts.get(target.measurement, 0) + 1
    return counts


def counted(found: TargetsFound) -> str:
    """Return what was found, in words.

    >>> from ct_measure_plugin.physics.targets import TargetsFound
    >>> counted(TargetsFound(targets=(), others=()))
    'Nothing on this slice would measure an MTF well.'
    """
    if not found.targets:
        return "Nothing on this slice would measure an MTF well."
    kinds = [target.kind for target in found.targets]
    parts = [
        f"{kinds.count(kind)} {_WORDS[kind] if kinds.count(kind) == 1 else _MANY[kind]}"
        for kind in dict.fromkeys(kinds)
    ]
    words = parts[0] if len(parts) == 1 else f"{', '.join(parts[:-1])} and {parts[-1]}"
    return f"{words} would measure well."


def reasons(found: TargetsFound) -> list[str]:
    """Return why the others would not do, a sentence or two each."""
    return [
        f"{_WORDS[one.kind].capitalize()} at {one.center_mm[0]:.1f}, {one.center_mm[1]:.1f} mm:"
        f" {one.why.reason}. {one.why.remedy[:1].upper()}{one.why.remedy[1:]}."
        for one in found.others
    ]


def search_uniform(
    placement: Placement, point: Sequence[float], patch_px: int
) -> Disc | NotMeasured:
    """Return where on the slice shown the noise can be measured; it touches no layer."""
    k = placement.plane_of(tuple(point)[-placement.layer.ndim :])
    return uniform_place(placement.volume, k, patch_px=patch_px)


def draw_targets(viewer: Any, placement: Placement, found: TargetsFound, name: str) -> Any:
    """Draw the targets of one measurement on a layer of their own; return it, None if none."""
    regions = [target.region for target in found.targets if target.measurement == name]
    return draw_suggested(viewer, placement, regions, find(name).title)


def draw_suggested(viewer: Any, placement: Placement, regions: Sequence[Region], what: str) -> Any:
    """Draw regions on the layer of what was suggested, alone; return it, None for no regions."""
    if not regions:
        return None
    title = f"Suggested: {what}"
    layer = next((one for one in viewer.layers if one.name == title), None)
    if layer is None:
        layer = new_regions_layer(viewer, placement.layer, title)
    else:
        layer.selected_data = set(range(layer.nshapes))
        layer.remove_selected()
    frame = LayerFrame(layer, placement, viewer.dims.point)
    add_outlines(layer, [outline_of(region, frame) for region in regions])
    layer.mode = "select"
    return layer
