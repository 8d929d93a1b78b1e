"""From a moved box to its MTF on the screen: how long the dock takes, as a ratio.

Run it under a (virtual) display: ``xvfb-run -a python tests/benchmarks/mtf_update.py``. A box of
64 × 64 pixels over a slanted edge in a slice of 512 × 512, the dock floating, the MTF with its band
and ticks drawn. For each of many moves:

- *asking*: the main thread reads the layer and hands the question to the worker;
- *measuring*: the worker, while the window stays alive;
- *showing*: the main thread writes numbers, redraws and paints the plot;
- *window held*: asking and showing together, which is all that a drag can feel.

The peer, in the same run, is one numpy transform of the box, forwards, as 1000 of them take. Where
another job holds the machine, its turns are in every figure; the processor's own time of the main
thread is given beside them.
"""

from __future__ import annotations

import os
import tempfile
import time
from pathlib import Path

os.environ.setdefault("QT_API", "pyside6")
os.environ["NAPARI_CONFIG"] = str(Path(tempfile.mkdtemp()) / "settings.yaml")

import napari
import numpy as np
from qtpy.QtWidgets import QApplication
from scipy.special import ndtr

from ct_measure_plugin.physics.regions import Box
from ct_measure_plugin.physics.volume import Volume
from ct_measure_plugin.viewer.demo import draw_regions
from ct_measure_plugin.viewer.docks.mtf import MtfDock
from ct_measure_plugin.viewer.layers import layer_of

UPDATES = 120
PIXEL = 0.5
SIDE = 64

#: The target for the window's own work in one update of a floating dock, milliseconds.
TARGET = 33.0


def edge() -> Volume:
    """Return a Gaussian edge of 0.6 mm, 4° from the columns, 1000 HU high, noise of 15 HU."""
    rng = np.random.default_rng(1)
    y, x = (np.mgrid[:512, :512] - 255.5) * PIXEL
    turn = np.radians(4.0)
    clean = 1000 * ndtr((x * np.cos(turn) + y * np.sin(turn)) / 0.6)
    hu = np.round(clean + rng.normal(0, 15, clean.shape)).astype(np.int16)
    return Volume(hu[None], (2.0, PIXEL, PIXEL))


def line(name: str, seconds: list[float], peer: float) -> str:
    median, high = np.percentile(seconds, [50, 95])
    return (
        f"{name}: median {1e3 * median:5.1f} ms, p95 {1e3 * high:5.1f} ms,"
        f" ratio of medians {median / peer:6.0f}"
    )


def transform_time() -> float:
    patch = np.random.default_rng(0).normal(size=(SIDE, SIDE))
    start = time.perf_counter()
    for _ in range(1000):
        np.fft.fft2(patch)
    return (time.perf_counter() - start) / 1000


def main() -> None:
    viewer = napari.Viewer()
    volume = edge()
    data, attributes, _ = layer_of(volume, "CT")
    image = viewer.add_image(data, **attributes)
    middle = 255.5 * PIXEL
    side = SIDE * PIXEL
    layer = draw_regions(viewer, image, [Box((middle, middle), (side, side), z_mm=0.0)])
    dock = MtfDock(viewer)
    holder = viewer.window.add_dock_widget(dock, name="MTF")
    holder.setFloating(True)
    dock.on_image.setChecked(False)  # napari's own redraw of a layer is not ours
    dock.choose(image, regions=layer)
    dock.measure_now()
    QApplication.processEvents()
    figures: dict[str, list[float]] = {
        name: [] for name in ("asking", "measuring", "showing", "window held", "its processor time")
    }
    for step in range(UPDATES):
        layer.data = [layer.data[0] + np.array([0, 0.5, 0.25]) * (-1) ** step]
        at, own = [time.perf_counter()], [time.thread_time()]
        questions, _ = dock._ask()
        at.append(time.perf_counter()), own.append(time.thread_time())
        answers = dock._memory.answer(questions)
        at.append(time.perf_counter()), own.append(time.thread_time())
        dock._show(answers)
        dock.repaint()
        dock.answers.plot.repaint()
        at.append(time.perf_counter()), own.append(time.thread_time())
        asking, measuring, showing = np.diff(at)
        figures["asking"].append(asking)
        figures["measuring"].append(measuring)
        figures["showing"].append(showing)
        figures["window held"].append(asking + showing)
        figures["its processor time"].append(np.diff(own)[0] + np.diff(own)[2])
    peer = transform_time()
    print(f"one transform of {SIDE} × {SIDE}: {1e6 * peer:.0f} µs")
    for name, seconds in figures.items():
        print(line(f"{name:19s}", seconds, peer))
    held = 1e3 * float(np.percentile(figures["window held"], 95))
    print(f"target: window held below {TARGET:.0f} ms in 95 % of updates; here {held:.1f} ms")
    follow(viewer, dock, layer)
    viewer.close()


def follow(viewer: napari.Viewer, dock: MtfDock, layer: object) -> None:
    """Drag for three seconds as a mouse does, and count what is shown."""
    shown = []
    real = dock._show
    dock._show = lambda answers: (shown.append(time.perf_counter()), real(answers))[1]
    moves, end = 0, time.perf_counter() + 3.0
    while time.perf_counter() < end:
        layer.data = [layer.data[0] + np.array([0, 0.25 * (-1) ** (moves // 9), 0.1])]
        moves += 1
        QApplication.processEvents()
    gaps = np.diff(shown) if len(shown) > 2 else np.array([np.nan])
    print(
        f"a drag of 3 s: {moves} moves, {len(shown)} answers shown,"
        f" p95 of the time between them {1e3 * np.percentile(gaps, 95):.0f} ms"
    )


if __name__ == "__main__":
    main()
