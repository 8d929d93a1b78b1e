"""Pictures of the regions' dock for its page: rods of the bench phantom on two kernels.

    xvfb-run -a -s "-screen 0 1400x900x24" python tests/viewer/region_screens.py FOLDER

Without a folder they go to docs/images. Beside the page's picture it takes others, to be looked at.
"""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))

from screens import ROOT, SIZE, save, wait

#: Rods on the section from 27.5 to 35 mm, middle (y, x) in mm, as the phantom's recipe places them.
RODS = {
    "PTFE": (-4.8, 13.2),
    "LDPE": (-8.2, -19.8),
    "POM": (24.4, 11.4),
    "air": (-30.0, 9.4),
    "PMMA": (17.7, -30.7),
    "nylon-6": (44.9, -5.9),
}


def open_scene():
    """Return a viewer with two kernels, the dock, and rods drawn and chosen."""
    import napari

    from ct_measure_plugin.physics.regions import Disc
    from ct_measure_plugin.viewer.docks.region_statistics import RegionStatisticsDock
    from ct_measure_plugin.viewer.loading import entries_at, layers_of
    from ct_measure_plugin.virtual_scanner import samples

    viewer = napari.Viewer(show=True)
    viewer.window.resize(*SIZE)
    images = []
    for name in ("standard", "sharp"):
        title = samples.sample(name).title
        [(data, attributes, _)] = layers_of(entries_at([samples.folder(name)]), names=[title])
        images.append(viewer.add_image(data, **attributes))
    dock = RegionStatisticsDock(viewer)
    viewer.window.add_dock_widget(dock, name="Region statistics", area="right")
    dock.choose(images)
    dock.start_drawing()
    viewer.dims.set_point(0, 31.25)
    ends = (27.5, 35.0)
    rods = [Disc(middle, 3.6, z_mm=ends, name=name, group="rod") for name, middle in RODS.items()]
    dock.acts.add([*rods, Disc((0.0, -2.0), 5.0, z_mm=ends, name="water", group="background")])
    dock.choice.chosen_layer().mode = "select"
    dock.refresh_now()
    dock.view.choose({0})
    dock.view.selectRow(0)
    viewer.reset_view()
    return viewer, images, dock


def main():
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("folder", type=Path, nargs="?", default=ROOT / "docs/images")
    given = parser.parse_args()
    given.folder.mkdir(parents=True, exist_ok=True)
    from ct_measure_plugin.viewer.docks.fold import Fold

    viewer, images, dock = open_scene()
    shots = [("regions", ()), ("regions_typing", ("numbers",)), ("regions_arranging", ("Arrange",))]
    for name, open_ones in shots if given.folder.name != "images" else shots[:1]:
        for fold in dock.findChildren(Fold):
            title = fold.heading.text()
            fold.open(any(word in title for word in open_ones or ("Histogram",)))
        if open_ones:
            dock.choose(images[:1])
        dock.refresh_now()
        for theme in ("dark", "light") if given.folder.name != "images" else ("dark",):
            viewer.theme = theme
            wait(2.5)
            file = given.folder / f"{name}_{theme}.png"
            save(viewer, file)
            print(f"{file.name}: {file.stat().st_size / 1000:.0f} kB")  # noqa: T201
    viewer.close()


if __name__ == "__main__":
    main()
