"""Open napari on a series with every dock filled.

``python -m ct_measure_plugin.viewer.demo FOLDER [--records FILE]``

The docks are those of the plugin's own manifest, so a new one appears here by itself.
"""

from __future__ import annotations

import argparse
import math
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.records import Record

__all__ = [
    "PLUGIN",
    "add_docks",
    "aim",
    "draw_records",
    "draw_regions",
    "fill",
    "main",
    "regions_of",
]

PLUGIN = "ct-measure-plugin"


def main(arguments: Sequence[str] | None = None) -> int:
    """Open the window and stay until it is closed."""
    parser = argparse.ArgumentParser(prog="ct_measure_plugin.viewer.demo", description=__doc__)
    parser.add_argument("folder", type=Path, help="a folder with a CT series")
    parser.add_argument("--records", type=Path, help="records whose regions are drawn")
    given = parser.parse_args(arguments)
    import napari

    from ct_measure_plugin.records import read_json

    records = read_json(given.records) if given.records else ()
    viewer = napari.Viewer(title="CT Measure")
    fill(viewer, given.folder, records)
    napari.run()
    return 0


def fill(viewer: Any, folder: Path, records: Sequence[Record] = ()) -> None:
    """Open a series, draw the records' regions on it, and open every dock.

    Parameters
    ----------
    viewer : napari.Viewer
        Any viewer with a window.
    folder : Path
        Holds the series.
    records : sequence of Record
        Kept in the session; their regions are drawn.
    """
    from ct_measure_plugin.viewer.session import Session

    image = viewer.open(str(folder), plugin=PLUGIN)[0]
    session = Session.of(viewer)
    for record in records:
        session.keep(record)
    layers = draw_records(viewer, image, records)
    aim(add_docks(viewer), image, layers, records)
    viewer.canvas.overlays.scale_bar.visible = True
    viewer.reset_view()


def regions_of(records: Iterable[Record]) -> list[Region]:
    """Return the regions of records, each once, that have an outline to draw."""
    from ct_measure_plugin.records import region_from_dict

    found: dict[str, Region] = {}
    for record in records:
        for text in record.regions:
            if text.get("kind") != "mask":
                found.setdefault(str(text), region_from_dict(text))
    return list(found.values())


def draw_records(viewer: Any, image: Any, records: Sequence[Record]) -> dict[str, Any]:
    """Draw the records' regions, on a layer of their own for each measurement.

    Returns the Shapes layers by the measurement's name. Regions of different measurements stay
    apart: a spectrum takes all shapes of its layer together.
    """
    from ct_measure_plugin.measurements import find

    found = {}
    for name in reversed(dict.fromkeys(record.measurement for record in records)):
        regions = regions_of(record for record in records if record.measurement == name)
        if regions:
            found[name] = draw_regions(viewer, image, regions, find(name).title)
    return found


def aim(
    docks: Iterable[Any], image: Any, layers: dict[str, Any], records: Sequence[Record] = ()
) -> None:
    """Let each dock measure the regions that were drawn for one of its measurements.

    It takes the settings of the first record of that measurement.
    """
    from ct_measure_plugin.measurements.catalogue import settings_for
    from ct_measure_plugin.viewer.docks.measurement import MeasurementDock
    from ct_measure_plugin.viewer.docks.region_statistics import RegionStatisticsDock

    for dock in docks:
        if isinstance(dock, MeasurementDock):
            name = next((one for one in dock.names if one in layers), None)
            if name is not None:
                dock.choose_measurement(name)
                kept = next((one.settings for one in records if one.measurement == name), None)
                if kept is not None:
                    dock.form.show(settings_for(name, kept))
                dock.choose(image, regions=layers[name])
        elif isinstance(dock, RegionStatisticsDock) and "region_statistics" in layers:
            dock.choose(image, layers["region_statistics"])


def draw_regions(viewer: Any, image: Any, regions: Sequence[Region], name: str = "Regions") -> Any:
    """Draw regions on a layer over an image, each on the slice in its middle; go to the first.

    Returns the Shapes layer.
    """
    import numpy as np

    from ct_measure_plugin.physics.coverage import slices_of
    from ct_measure_plugin.physics.regions import Path, Segment
    from ct_measure_plugin.viewer.layer_frame import LayerFrame
    from ct_measure_plugin.viewer.region_features import Z_HIGH, Z_LOW, set_column
    from ct_measure_plugin.viewer.session import Session
    from ct_measure_plugin.viewer.shapes import new_regions_layer, rename, shape_of

    placement = Session.of(viewer).placement(image)
    layer = new_regions_layer(viewer, image, name)
    frame = LayerFrame(layer, placement, viewer.dims.point)
    stand = None
    for region in regions:
        slices = slices_of(region, placement.volume)
        z = float(placement.volume.positions_mm[slices[len(slices) // 2]])
        corners, kind = shape_of(region)
        worlds = [placement.world_of((z, float(y), float(x))) for y, x in corners]
        drawn = np.array([layer.world_to_data(world) for world in worlds])
        looks = {}
        if isinstance(region, Segment | Path) and region.width_mm > 0:
            looks["edge_width"] = region.width_mm / frame.stretch
        layer.add([drawn], shape_type=kind, **looks)
        rename(layer, layer.nshapes - 1, region.name)
        low, high = _ends(region.z_mm)
        set_column(layer, Z_LOW, {layer.nshapes - 1: low})
        set_column(layer, Z_HIGH, {layer.nshapes - 1: high})
        stand = worlds[0] if stand is None else stand
    if stand is not None and layer.ndim == 3:
        viewer.dims.set_point(0, stand[0])
        layer.selected_data = {0}
    layer.mode = "select"
    return layer


def _ends(z_mm: float | tuple[float, float] | None) -> tuple[float, float]:
    """Return the slices of a region as a layer's features hold them."""
    if z_mm is None:
        return -math.inf, math.inf
    return z_mm if isinstance(z_mm, tuple) else (math.nan, math.nan)


def add_docks(viewer: Any) -> list[Any]:
    """Open every dock of the manifest, as tabs of one column; return the widgets."""
    from npe2 import PluginManager

    from ct_measure_plugin.viewer.docks.dock import spell_tabs

    manifest = PluginManager.instance().get_manifest(PLUGIN)
    frames: dict[str, Any] = {}
    found = []
    for widget in manifest.contributions.widgets or ():
        frame, inside = viewer.window.add_plugin_dock_widget(
            PLUGIN, widget.display_name, tabify=bool(frames)
        )
        frames[widget.display_name] = frame
        found.append(inside)
    spell_tabs(frames)
    if "Region statistics" in frames:
        frames["Region statistics"].raise_()
    return found


if __name__ == "__main__":
    raise SystemExit(main())
