"""Importing the package costs next to nothing: no Qt, no scipy, no plotting, not even numpy."""

from __future__ import annotations

import subprocess
import sys

import pytest

HEAVY = (
    "PySide6", "PyQt6", "qtpy", "napari", "scipy", "skimage", "matplotlib", "pyqtgraph", "vispy",
    "pydicom", "pydantic", "sqlalchemy", "dask", "numpy", "pandas",
)  # fmt: skip


def heavy_after(statement: str) -> set[str]:
    """Run a statement in a fresh process and return which heavy packages it loaded."""
    code = f"import sys\n{statement}\nprint(*sorted({{m.split('.')[0] for m in sys.modules}}))"
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=120
    )
    return set(done.stdout.split()) & set(HEAVY)


def test_the_package_alone_loads_nothing_heavy():
    assert heavy_after("import ct_measure_plugin") == set()


def test_the_shell_alone_loads_nothing_heavy():
    """`ct-measure --help` answers at once."""
    assert heavy_after("import ct_measure_plugin.cli") == set()


def test_measuring_loads_no_screen():
    loaded = heavy_after(
        "import numpy as np, ct_measure_plugin as ctm\n"
        "v = ctm.Volume(np.zeros((1, 32, 32)), (1, 1, 1))\n"
        "ctm.measure('region_statistics', v, ctm.regions.Disc((16, 16), 8))"
    )
    assert (
        loaded & {"PySide6", "PyQt6", "qtpy", "napari", "matplotlib", "pyqtgraph", "vispy"} == set()
    )
    assert "numpy" in loaded


@pytest.mark.parametrize("package", ["scipy", "matplotlib"])
def test_the_check_sees_what_it_looks_for(package):
    """Canary: the same check is red on a process that does load them."""
    assert package in heavy_after(f"import ct_measure_plugin, {package}")
