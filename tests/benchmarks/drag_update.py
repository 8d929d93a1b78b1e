"""From a moved shape to its number on the screen: how long the dock takes, as a ratio.

Run it under a (virtual) display: ``xvfb-run -a python tests/benchmarks/drag_update.py``. A slice of
512 × 512, the dock floating, ellipses of 30 pixels. Shapes are moved thirty times a second; from
napari having moved one, through Qt's own event loop with its timers, curves and notes, to the
painted row of the list, is one update. napari's canvas is not redrawn meanwhile: without a graphics
card that alone takes longer, and is not the dock's. The peer, in the same run, is numpy's mean and
standard deviation of the whole slice: what the plainest live read-out would compute on every move.
Then a brush on one of fifty labels of 150 × 512 × 512, from the stroke to its number, and what the
parts of an update cost the processor.
"""

from __future__ import annotations

import os
import statistics
import tempfile
import time
from collections.abc import Callable, Sequence
from functools import partial
from pathlib import Path
from typing import Any

os.environ.setdefault("QT_API", "pyside6")
os.environ["NAPARI_CONFIG"] = str(Path(tempfile.mkdtemp()) / "settings.yaml")

import napari
import numpy as np
from qtpy.QtWidgets import QApplication

from ct_measure_plugin.physics.volume import Volume
from ct_measure_plugin.viewer.docks.region_statistics import RegionStatisticsDock
from ct_measure_plugin.viewer.docks.region_view import RegionView
from ct_measure_plugin.viewer.layers import layer_of
from ct_measure_plugin.viewer.region_drawing import new_labels_layer
from ct_measure_plugin.viewer.shapes import new_regions_layer

UPDATES = 120

#: Seconds between moves, and after which the benchmark ends without a number.
PERIOD, GIVEN_UP = 0.034, 30.0


def p95(values: list[float]) -> float:
    return float(np.percentile(values, 95)) * 1000


def judged(taken: list[tuple[float, float]], wanted: float) -> str:
    """Say how long updates took, on the clock and of the processor; others may use it too."""
    wall, own = (p95([pair[i] for pair in taken]) for i in (0, 1))
    verdict = "met" if wall < wanted else "MISSED"
    return f"p95 {wall:.1f} ms ({own:.1f} ms of processor), under {wanted:.0f} wanted: {verdict}"


class Screen:
    """Sees the list being painted."""

    def __init__(self, dock: RegionStatisticsDock) -> None:
        self.dock, self.fresh = dock, []
        self.wanted: Callable[[], bool] = lambda: False
        self.painted: tuple[float, float] | None = None
        paint = RegionView.paintEvent

        def seen(view: RegionView, event: Any) -> None:
            paint(view, event)
            if self.painted is None and self.wanted():
                self.painted = time.perf_counter(), time.process_time()

        RegionView.paintEvent = seen

    def update(self, change: Callable[[], None], index: int) -> tuple[float, float]:
        """Change a region; wait until its new number is painted, and then for the next move.

        Returns seconds of the clock and of the processor.
        """
        before = self.number(index)
        self.wanted = lambda: self.number(index) not in ((), before)
        self.painted = None
        change()  # napari's own work, not ours
        start, own = time.perf_counter(), time.process_time()
        while self.painted is None:
            QApplication.processEvents()
            if time.perf_counter() - start > GIVEN_UP:
                raise SystemExit("no number came")
        self.fresh.append(sum(not row.stale for row in self.dock.board.rows))
        taken = self.painted[0] - start, self.painted[1] - own
        self.rest(start + PERIOD)
        return taken

    def number(self, index: int) -> tuple[float, ...]:
        """Return a row's numbers as they stand in the list; none while they are those of before."""
        row = next((one for one in self.dock.model.rows if one.index == index), None)
        if row is None or row.stale or not row.answer:
            return ()
        return tuple(row.quantity(name).value for name in ("n", "mean"))

    def rest(self, until: float) -> None:
        while time.perf_counter() < until:
            QApplication.processEvents()
            time.sleep(0.0005)


def ellipse(row: float, column: float) -> np.ndarray:
    return np.array(
        [[0, row + i * 30, column + j * 30] for i, j in ((-1, -1), (-1, 1), (1, 1), (1, -1))]
    )


def painting(viewer: napari.Viewer, dock: RegionStatisticsDock, screen: Screen) -> None:
    """Time a brush on one of fifty labels, of three slices and then of sixty."""
    rng = np.random.default_rng(2)
    hu = np.round(rng.normal(40, 12, (150, 512, 512))).astype(np.int16)
    data, attributes, _ = layer_of(Volume(hu, (2.0, 0.5, 0.5)), "large")
    image = viewer.add_image(data, **attributes)
    layer = new_labels_layer(viewer, image)
    for label in range(1, 51):
        z, y, x = rng.integers(0, [140, 450, 450])
        layer.data[z : z + 3, y : y + 60, x : x + 60] = label
    layer.data[layer.data == 7] = 0
    layer.data[69:72, 200:260, 200:260] = 7
    layer.refresh()
    viewer.dims.set_point(0, 140.0)
    layer.selected_label = 7
    dock.choose(image, layer)
    dock.refresh_now()
    for slices in (3, 60):
        layer.data[69 : 69 + slices, 200:260, 200:260] = 7
        layer.refresh()
        screen.rest(time.perf_counter() + 2.0)
        taken = []
        for step in range(UPDATES):
            at = (70, 202 + step % 56, 202 + 2 * step % 56)
            new = 0 if layer.data[at] else 7  # so that every stroke changes something
            taken.append(screen.update(partial(layer.paint, at, new), 7))
        print(f"a brush on one of 50 labels, {slices} slices thick: {judged(taken, 33)}")


def phases(dock: RegionStatisticsDock, move: Callable[[int], None]) -> None:
    """Say what the parts of an update cost the processor, the cheapest of many."""
    spent: dict[str, list[float]] = {}

    def timed(name: str, act: Callable[[], object]) -> None:
        start = time.process_time()
        act()
        spent.setdefault(name, []).append(1000 * (time.process_time() - start))

    for step in range(UPDATES):
        move(step)
        timed("read, measure, lay out", dock.follow)
        timed("paint the list", dock.view.viewport().repaint)
        timed("lay out the curves", dock.show_chosen)
        timed("paint the curves", dock.plots.plot.viewport().repaint)
    words = ", ".join(f"{name} {min(all_):.1f}" for name, all_ in spent.items())
    print(f"   milliseconds of processor at best: {words}")


def main() -> None:
    rng = np.random.default_rng(1)
    hu = np.round(rng.normal(40, 12, (3, 512, 512))).astype(np.int16)
    volume = Volume(hu, (2.0, 0.5, 0.5))
    viewer = napari.Viewer()
    data, attributes, _ = layer_of(volume, "CT")
    image = viewer.add_image(data, **attributes)
    layer = new_regions_layer(viewer, image)
    dock = RegionStatisticsDock(viewer)
    screen = Screen(dock)
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
    viewer.window._qt_viewer.canvas.native.setUpdatesEnabled(False)
    for count, wanted in ((1, 16.0), (40, 33.0)):
        layer.data = []
        for i in range(count):
            layer.add(ellipse(50 + 58 * (i // 8), 50 + 58 * (i % 8)), shape_type="ellipse")
        dock.refresh_now()
        screen.rest(time.perf_counter() + 0.5)
        for all_move in (False, True) if count > 1 else (False,):
            moved = range(count) if all_move else (0,)
            taken = []
            screen.fresh.clear()

            def move(step: int, moved: Sequence[int] = moved) -> None:
                shapes = [np.asarray(shape) for shape in layer.data]
                for i in moved:
                    shapes[i] = shapes[i] + [0, 0.25 * (-1) ** step, 0.1]
                layer.data = shapes

            for step in range(UPDATES):
                taken.append(screen.update(partial(move, step), 0))
            what = "all moved" if all_move else "one moved"
            ratio = statistics.median(wall for wall, _ in taken) / statistics.median(peer)
            print(
                f"{count:2d} regions, {what}: {judged(taken, wanted)}; ratio {ratio:.0f};"
                f" at least {min(screen.fresh)} of {count} rows show where they are"
            )
            phases(dock, move)
    painting(viewer, dock, screen)
    viewer.close()


if __name__ == "__main__":
    main()
