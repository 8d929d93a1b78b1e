"""Every name in `__all__` exists, in every module, and the public ones are what the design says."""

from __future__ import annotations

import importlib
import pkgutil
import types

import pytest

import ct_measure_plugin

MODULES = sorted(
    module.name
    for module in pkgutil.walk_packages(ct_measure_plugin.__path__, "ct_measure_plugin.")
    if ".viewer.docks" not in module.name and ".viewer.plots" not in module.name
)


def missing(module: types.ModuleType) -> list[str]:
    return [name for name in getattr(module, "__all__", ()) if not hasattr(module, name)]


#: Without the programs, which run when they are imported.
PROMISING = [name for name in MODULES if not name.endswith(("__main__", ".demo"))]


@pytest.mark.parametrize("name", ["ct_measure_plugin", *PROMISING])
def test_every_promised_name_exists(name):
    module = importlib.import_module(name)
    assert missing(module) == []


def test_a_broken_promise_is_red():
    liar = types.ModuleType("liar")
    liar.__all__ = ["here", "gone"]
    liar.here = 1
    assert missing(liar) == ["gone"]


def test_every_room_says_what_it_is_for():
    rooms = [
        name for name in MODULES if name.count(".") == 1 and name != "ct_measure_plugin.errors"
    ]
    for name in rooms:
        text = " ".join((importlib.import_module(name).__doc__ or "").split())
        assert "What belongs here" in text, name
        assert "must not" in text, name


def test_the_public_names_of_the_design():
    for name in ("scan_series", "read_series", "Volume", "measure", "regions", "physics"):
        assert hasattr(ct_measure_plugin, name), name
    for name in ("Disc", "Ellipse", "Box", "Polygon", "Segment", "Mask"):
        assert hasattr(ct_measure_plugin.regions, name), name
    assert callable(ct_measure_plugin.physics.region_statistics)


def test_regions_are_there_before_anything_else_is_loaded():
    """In a fresh process, since any other import may load them on the way."""
    import subprocess
    import sys

    code = "import ct_measure_plugin as ctm; print(ctm.regions.Disc.kind)"
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60
    )
    assert done.stdout.strip() == "disc"
