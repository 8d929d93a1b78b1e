"""Viewer tests: napari's settings go to a scratch file, and one Qt binding serves all."""

from __future__ import annotations

import os
import tempfile
from pathlib import Path

# Before napari is imported: its test fixtures reset the settings on disk, and those of whoever
# runs the tests must not be touched.
_scratch = tempfile.mkdtemp(prefix="ct-measure-tests-")
os.environ["NAPARI_CONFIG"] = str(Path(_scratch) / "settings.yaml")
os.environ["CT_MEASURE_CONFIG"] = _scratch
os.environ.setdefault("QT_API", "pyside6")
os.environ.setdefault("PYTEST_QT_API", os.environ["QT_API"])

import numpy as np  # noqa: E402
import pytest  # noqa: E402

from ct_measure_plugin.physics.volume import HeaderWindow, Volume  # noqa: E402


def pytest_collection_modifyitems(config, items):
    """Without a display the tests on a real canvas cannot run, and say so."""
    if os.environ.get("DISPLAY"):
        return
    reason = pytest.mark.skip(reason="needs a display: run under xvfb-run, as tests/run does")
    for item in items:
        if "canvas" in item.keywords:
            item.add_marker(reason)


@pytest.fixture
def volume():
    """Noise of 10 HU around 40 HU, 6 slices of 40 × 50, origin off zero, two header windows."""
    rng = np.random.default_rng(5)
    hu = np.round(rng.normal(40, 10, (6, 40, 50))).astype(np.int16)
    return Volume(
        hu,
        spacing_mm=(2.5, 0.7, 0.7),
        origin_mm=(-20.0, -14.0, 7.0),
        windows=(HeaderWindow(40, 400, "SOFT"), HeaderWindow(300, 1500, "BONE")),
    )


@pytest.fixture
def viewer_model():
    """A viewer without a window: what most tests need, and thirty times faster."""
    from napari.components import ViewerModel

    return ViewerModel()
