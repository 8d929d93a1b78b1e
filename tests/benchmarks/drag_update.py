"""From a moved shape to its number on the screen: how long the dock takes, as a ratio.

Run it under a (virtual) display: ``xvfb-run -a python tests/benchmarks/drag_update.py``. A slice of
512 × 512, the dock floating, ellipses of 30 pixels; each update moves shapes, lets the dock
read the layer, measure and paint. The peer, in the same run, is numpy's mean and standard deviation
of the whole slice: what the plainest live read-out would compute on every move.
"""

from __future__ import annotations

import os
import statistics
import tempfile
import time
from pathlib import Path

os.environ.setdefault("QT_API", "pyside6")
os.environ["NAPARI_CONFIG"] = str(Path(tempfile.mkdtemp()) / "settings.yaml")

import napari
import numpy as np
from qtpy.QtWidgets import QApplication

from ct_measure_plugin.physics.volume import Volume
from ct_measure_plugin.viewer.docks.region_statistics import RegionStatisticsDock
from ct_measure_plugin.viewer.layers import layer_of
from ct_measure_plugin.viewer.shapes import new_regions_layer

UPDATES = 120


def p95(values: list[float]) -> float:
    return float(np.percentile(values, 95)) * 1000


def ellipse(row: float, column: float) -> np.ndarray:
    return np.array(
        [[0, row + i * 30, column + j * 30] for i, j in ((-1, -1), (-1, 1), (1, 1), (1, -1))]
    )


def main() -> None:
    rng = np.random.default_rng(1)
    hu = np.round(rng.normal(40, 12, (3, 512, 512))).astype(np.int16)
    volume = Volume(hu, (2.0, 0.5, 0.5))
    viewer = napari.Viewer()
    data, attributes, _ = layer_of(volume, "CT")
    image = viewer.add_image(data, **attributes)
    layer = new_regions_layer(viewer, image)
    dock = RegionStatisticsDock(viewer)
    holder = viewer.window.add_dock_widget(dock, name="Region statistics")
    holder.setFloating(True)
    dock.choose(image, layer)
    peer = []
    for _ in range(UPDATES):
        start = time.perf_counter()
        plane = hu[0].astype(float)
        float(plane.mean()), float(plane.std(ddof=1))
        peer.append(time.perf_counter() - start)
    print(f"numpy mean and SD of the slice: median {1000 * statistics.median(peer):.1f} ms")
    for count in (1, 40):
        layer.data = []
        for i in range(count):
            layer.add(ellipse(50 + 58 * (i // 8), 50 + 58 * (i % 8)), shape_type="ellipse")
        QApplication.processEvents()
        dock.refresh_now()
        for all_move in (False, True):
            taken = []
            for step in range(UPDATES):
                shapes = [np.asarray(shape) for shape in layer.data]
                moved = range(count) if all_move else (0,)
                for i in moved:
                    shapes[i] = shapes[i] + [0, 0.25 * (-1) ** step, 0.1]
                layer.data = shapes  # napari's own work, not ours
                start = time.perf_counter()
                dock.refresh_now()
                dock.repaint()
                taken.append(time.perf_counter() - start)
            what = "all moved" if all_move else "one moved"
            ratio = statistics.median(taken) / statistics.median(peer)
            print(f"{count:2d} regions, {what}: p95 {p95(taken):5.1f} ms, ratio {ratio:.1f}")
    viewer.close()


if __name__ == "__main__":
    main()
