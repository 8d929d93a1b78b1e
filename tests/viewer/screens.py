"""Pictures of the docks as people see them, 1280 × 800.

    xvfb-run -a -s "-screen 0 1400x900x24" python tests/viewer/screens.py [FOLDER] [--all]

Without a folder they go to docs/images: each dock in the dark theme, and one picture for the
README. With --all each is taken in the light theme, too. 256 colours keep each under 200 kB.
"""

from __future__ import annotations

import argparse
import os
import tempfile
from pathlib import Path

os.environ.setdefault(
    "NAPARI_CONFIG", str(Path(tempfile.mkdtemp(prefix="ct-measure-screens-")) / "settings.yaml")
)
os.environ.setdefault("QT_API", "pyside6")

ROOT = Path(__file__).parents[2]
SIZE = (1280, 800)
THEMES = ("dark", "light")


def wait(seconds=0.6):
    """Let Qt draw and timers run."""
    from qtpy.QtCore import QEventLoop, QTimer

    loop = QEventLoop()
    QTimer.singleShot(int(seconds * 1000), loop.quit)
    loop.exec()


def records_of_demo(folder):
    from ct_measure_plugin.dicom import read_series
    from ct_measure_plugin.records import load_plan
    from ct_measure_plugin.run import run_plan
    from ct_measure_plugin.virtual_scanner import samples

    return run_plan(load_plan(samples.folder() / "demo_plan.yaml"), read_series(folder))


def open_filled():
    """Return a napari window as the demo fills it, and its docks by display name."""
    import napari
    from npe2 import PluginManager

    from ct_measure_plugin.viewer import demo
    from ct_measure_plugin.virtual_scanner import samples

    folder = samples.folder("standard")
    viewer = napari.Viewer(show=True)
    viewer.window.resize(*SIZE)
    demo.fill(viewer, folder, records_of_demo(folder))
    manifest = PluginManager.instance().get_manifest(demo.PLUGIN)
    names = [widget.display_name for widget in manifest.contributions.widgets]
    docks = {
        name: next(dock for title, dock in viewer.window.dock_widgets.items() if name in title)
        for name in names
    }
    return viewer, docks


def raise_tab(widget):
    """Bring the tab of a docked widget to the front."""
    from qtpy.QtWidgets import QDockWidget

    while widget is not None and not isinstance(widget, QDockWidget):
        widget = widget.parentWidget()
    if widget is not None:
        widget.show()
        widget.raise_()


def stage(viewer, dock):
    """Show the regions of a dock alone, on the slice of the first; wait until it has measured."""
    from napari.layers import Shapes

    raise_tab(dock)
    wait(0.3)
    layer = getattr(dock, "_bound", None)
    if layer is not None and layer.nshapes:
        for one in viewer.layers:
            if isinstance(one, Shapes):
                one.visible = one is layer
        place = layer.data_to_world(layer.data[0][0])
        viewer.dims.set_point(0, place[0])
        viewer.layers.selection.active = layer
        layer.selected_data = set()
    following = getattr(dock, "_following", None)
    wait(1.5)
    while following is not None and following.busy:
        wait(0.2)
    wait(0.6)


def compare_kernels(viewer, dock):
    """Measure one edge on two kernels of the same raw data."""
    from ct_measure_plugin.viewer import demo

    (standard,) = dock.sources.chosen_images()
    layer = dock.sources.chosen_regions()
    standard.name = "Standard kernel"
    (sharp,) = viewer.open_sample(demo.PLUGIN, "sharp")
    viewer.layers.move(viewer.layers.index(sharp), 1)
    sharp.name = "Sharp kernel"
    layer.selected_data = {1}
    layer.remove_selected()
    dock.choose(standard, sharp, regions=layer)
    stage(viewer, dock)


def save(viewer, path):
    """Write a picture of the whole window."""
    from PIL import Image

    pixels = viewer.screenshot(canvas_only=False, flash=False)[..., :3]
    few = Image.fromarray(pixels).quantize(
        256, Image.Quantize.MAXCOVERAGE, dither=Image.Dither.NONE
    )
    few.save(path, optimize=True)
    return pixels.shape


def main():
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("folder", type=Path, nargs="?", default=ROOT / "docs/images")
    parser.add_argument("--all", action="store_true", help="the light theme, too")
    given = parser.parse_args()
    given.folder.mkdir(parents=True, exist_ok=True)
    viewer, docks = open_filled()
    for theme in THEMES if given.all else THEMES[:1]:
        viewer.theme = theme
        for name, dock in docks.items():
            if name == "All measurements" and not given.all:
                continue  # it looks like the others
            stage(viewer, dock)
            words = "".join(c if c.isalnum() else " " for c in name.lower()).split()
            file = given.folder / f"{'_'.join(words)}_{theme}.png"
            shape = save(viewer, file)
            size = f"{file.stat().st_size / 1000:.0f} kB"
            print(f"{file.name}: {shape[1]} × {shape[0]}, {size}")  # noqa: T201
    viewer.theme = "dark"
    compare_kernels(viewer, docks["MTF"])
    save(viewer, given.folder / "overview.png")
    viewer.close()


if __name__ == "__main__":
    main()
