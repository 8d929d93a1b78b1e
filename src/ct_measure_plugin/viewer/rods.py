"""Rods found by a layout as regions on a layer, and a layer of μ; no Qt."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

import dask.array as da

from ct_measure_plugin.errors import CtMeasureError
from ct_measure_plugin.measurements.materials import find_material
from ct_measure_plugin.measurements.rod_layouts import FoundRods, find_rods
from ct_measure_plugin.physics.hu_conversion import mu_volume
from ct_measure_plugin.viewer.layer_frame import LayerFrame
from ct_measure_plugin.viewer.layers import layer_of
from ct_measure_plugin.viewer.outlines import add_outlines
from ct_measure_plugin.viewer.region_drawing import outline_of
from ct_measure_plugin.viewer.shapes import new_regions_layer

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.measurements.materials import MaterialEntry
    from ct_measure_plugin.measurements.rod_layouts import RodLayout
    from ct_measure_plugin.physics.results import NotMeasured, Quantity
    from ct_measure_plugin.viewer.placement import Placement

__all__ = ["add_mu_layer", "draw_rods", "known_as", "search", "told"]


def search(
    placement: Placement,
    point: Sequence[float],
    layout: RodLayout,
    materials: Sequence[MaterialEntry],
    slices: int,
) -> FoundRods | NotMeasured:
    """Return the rods on the slice shown; for a thread, as it touches no layer's data but reads it.

    Parameters
    ----------
    placement : Placement
        The image layer.
    point : sequence of float
        Where the viewer stands.
    layout : RodLayout
        What to look for.
    materials : sequence of MaterialEntry
        What its materials are.
    slices : int
        So many slices about the one shown are averaged.
    """
    volume = placement.volume
    plane = placement.plane_of(tuple(point)[-placement.layer.ndim :])
    plane = min(max(int(plane), 0), volume.shape[0] - 1)
    return find_rods(
        volume,
        layout,
        z_mm=float(volume.positions_mm[plane]),
        slices=slices,
        materials=materials,
    )


def draw_rods(viewer: Any, placement: Placement, found: FoundRods) -> Any:
    """Draw the regions inside the rods on a layer of their own, and return it."""
    layer = new_regions_layer(viewer, placement.layer, "Rods")
    frame = LayerFrame(layer, placement, viewer.dims.point)
    add_outlines(layer, [outline_of(region, frame) for region in found.regions])
    layer.mode = "select"
    return layer


def told(found: FoundRods | NotMeasured) -> str:
    """Return what a search found, in words.

    >>> from ct_measure_plugin.physics.results import NotMeasured
    >>> told(NotMeasured("2 rods were found", "choose another slice"))
    'Not measured: 2 rods were found. Remedy: choose another slice.'
    """
    if not isinstance(found, FoundRods):
        return str(found)
    words = f"{len(found.regions)} rods, turned by {found.found.rotation.value:.1f}°."
    return " ".join([words, *(str(caution) for caution in found.found.cautions)])


def known_as(name: str, materials: Sequence[MaterialEntry]) -> str:
    """Return the listed material that a region's name means, "" if none.

    >>> from ct_measure_plugin.measurements.materials import shipped_materials
    >>> known_as("acrylic 2", shipped_materials()), known_as("Region 1", shipped_materials())
    ('PMMA', '')
    """
    try:
        return find_material(name, materials).name
    except CtMeasureError:
        return ""


def add_mu_layer(viewer: Any, placement: Placement, energy: Quantity) -> Any:
    """Add an image layer of μ in cm⁻¹, converted slice by slice as it is shown; return it.

    Measurements run on it as on any other; its caution tells the energy.
    """
    volume = placement.volume
    lazy = volume.hu
    if not hasattr(lazy, "dask"):
        lazy = da.from_array(lazy, (1, -1, -1))  # type: ignore[no-untyped-call] # dask ships none
    found = mu_volume(replace(volume, hu=lazy), energy)
    name = f"{placement.layer.name}, μ at {energy.value:.1f} keV"
    data, attributes, _ = layer_of(found, name)
    own = placement.layer
    attributes |= {
        "scale": own.scale,
        "translate": own.translate,
        "rotate": own.rotate,
        "shear": own.shear,
        "affine": own.affine,
        "units": own.units,
        "axis_labels": own.axis_labels,
    }
    low, high = attributes["contrast_limits"]
    attributes["contrast_limits"] = (float(low), float(high))
    return viewer.add_image(data, **attributes)
