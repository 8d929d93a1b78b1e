"""Mean and SD of the region that the user means, for a window: asked of the measurement."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from ct_measure_plugin.measurements import measure
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.viewer.shapes import drawn_on

if TYPE_CHECKING:
    from ct_measure_plugin.physics.results import Quantity
    from ct_measure_plugin.viewer.session import Session

__all__ = ["NoRegion", "Spread", "spread_of_region"]


@dataclass(frozen=True, slots=True)
class Spread:
    """Mean and SD of a region."""

    name: str
    mean: Quantity
    sd: Quantity


@dataclass(frozen=True, slots=True)
class NoRegion:
    """There is no region to measure, or it cannot be measured; the reason is for the user."""

    reason: str


def spread_of_region(session: Session, image: Any) -> Spread | NoRegion:
    """Return mean and SD, on an image layer, of the selected region.

    A shape selected in a Shapes layer, the active layer first; if none is, the only shape there
    is.

    Raises
    ------
    CtMeasureError
        If the image layer cannot be measured as it is.
    """
    found = _meant(session)
    if isinstance(found, NoRegion):
        return found
    layer, index = found
    placement = session.placement(image)
    drawn = drawn_on(layer, placement, session.viewer.dims.point)[index]
    if drawn.region is None:
        return NoRegion(f"{drawn.name} cannot be measured: {drawn.problem}.")
    answer: Any = measure("region_statistics", placement.volume, drawn.region)
    if isinstance(answer, NotMeasured):
        return NoRegion(f"{drawn.name}: {answer.reason}. {answer.remedy.capitalize()}.")
    return Spread(drawn.name, answer.mean, answer.sd)


def _meant(session: Session) -> tuple[Any, int] | NoRegion:
    """Return the layer and the index of the shape that the user means."""
    from napari.layers import Shapes

    viewer = session.viewer
    layers = [one for one in viewer.layers if isinstance(one, Shapes) and one.nshapes]
    layers.sort(key=lambda one: one is not viewer.layers.selection.active)  # the active one first
    for layer in layers:
        if layer.selected_data:
            return layer, min(layer.selected_data)
    if sum(layer.nshapes for layer in layers) == 1:
        return layers[0], 0
    if not layers:
        return NoRegion("Draw a region on a Shapes layer first.")
    return NoRegion("Select one of the regions on the Shapes layer first.")
