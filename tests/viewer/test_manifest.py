"""What napari is told: valid, complete, and red when broken."""

from __future__ import annotations

import copy
import importlib
import json
import subprocess
import sys
from pathlib import Path

import pytest
import yaml
from napari._app_model.constants import MenuId
from npe2 import PluginManifest
from npe2.cli import app
from typer.testing import CliRunner

import ct_measure_plugin
from ct_measure_plugin.measurements import DRAWN, NAMES
from ct_measure_plugin.virtual_scanner import samples

NAME = "ct-measure-plugin"
FILE = Path(ct_measure_plugin.__file__).with_name("napari.yaml")

#: How many contributions each section must hold: a misspelt section would be dropped in silence.
COUNTS = {
    "commands": 12 + len(samples.names()),
    "readers": 1,
    "widgets": 10,
    "sample_data": len(samples.names()),
    "menus": 2,
    "configurations": 1,
}


@pytest.fixture
def written():
    return yaml.safe_load(FILE.read_text(encoding="utf-8"))


def faults(manifest: dict) -> list[str]:
    """Return what `npe2 validate` does not see: napari would drop each of these in silence."""
    found = []
    contributions = manifest.get("contributions", {})
    for section, count in COUNTS.items():
        have = len(contributions.get(section, ()))
        if have != count:
            found.append(f"{section}: {have} instead of {count}")
    found += [f"unknown section {name}" for name in contributions if name not in COUNTS]
    known = {command["id"] for command in contributions.get("commands", ())}
    used = [
        entry["command"]
        for section in ("readers", "widgets", "sample_data")
        for entry in contributions.get(section, ())
    ]
    menus = contributions.get("menus", {})
    used += [entry["command"] for entries in menus.values() for entry in entries]
    found += [f"undeclared command {command}" for command in used if command not in known]
    allowed = {menu.value for menu in MenuId.contributables()}
    found += [f"menu {menu} takes no plugins" for menu in menus if menu not in allowed]
    return found


def test_the_distribution_validates():
    """The distribution, not the file: a name that differs from it removes the plugin."""
    done = CliRunner().invoke(app, ["validate", NAME])
    assert done.exit_code == 0, done.output


def test_nothing_is_dropped_in_silence(written):
    assert faults(written) == []


def test_every_command_can_be_imported(written):
    for command in written["contributions"]["commands"]:
        module, name = command["python_name"].split(":")
        assert callable(getattr(importlib.import_module(module), name)), command["id"]


def test_every_sample_is_offered_with_its_own_command(written):
    entries = written["contributions"]["sample_data"]
    assert tuple(entry["key"] for entry in entries) == samples.names()
    commands = {c["id"]: c["python_name"] for c in written["contributions"]["commands"]}
    for entry in entries:
        ending = entry["key"].replace("-", "_")
        assert commands[entry["command"]].endswith(f":sample_{ending}")


def test_a_measurement_s_dock_has_its_name(written):
    """One word, many doors: command, file and measurement are called the same.

    The docks that serve several measurements are named for what these have in common.
    """
    commands = {c["id"]: c["python_name"] for c in written["contributions"]["commands"]}
    for entry in written["contributions"]["widgets"]:
        word = entry["command"].removeprefix(f"{NAME}.")
        assert f".docks.{word}:" in commands[entry["command"]]
        assert word in ("window", "mtf", "all_measurements") or word in NAMES


def docks(written) -> list[type]:
    """Return the classes of the docks that are made from a measurement's types."""
    from ct_measure_plugin.viewer.docks.measurement import MeasurementDock

    commands = {c["id"]: c["python_name"] for c in written["contributions"]["commands"]}
    found = []
    for entry in written["contributions"]["widgets"]:
        module, name = commands[entry["command"]].split(":")
        dock = getattr(importlib.import_module(module), name)
        if issubclass(dock, MeasurementDock):
            assert dock.title == entry["display_name"]
            found.append(dock)
    return found


def test_every_measurement_has_a_dock_and_no_dock_is_empty(written):
    offered = [set(dock.names) & set(NAMES) for dock in docks(written)]
    assert all(offered)
    assert set().union(*offered) == set(DRAWN)


def broken(manifest: dict, change) -> dict:
    wrong = copy.deepcopy(manifest)
    change(wrong["contributions"])
    return wrong


@pytest.mark.parametrize(
    ("change", "fault"),
    [
        (lambda c: c.update(widget=c.pop("widgets")), "widgets: 0 instead of 10"),
        (lambda c: c["widgets"][0].update(command=f"{NAME}.windw"), "undeclared command"),
        (lambda c: c["readers"][0].update(command=f"{NAME}.red"), "undeclared command"),
        (lambda c: c["menus"].update({"napari/layers/context": []}), "takes no plugins"),
        (lambda c: c["sample_data"].pop(), "sample_data: "),
    ],
)
def test_a_broken_manifest_is_red(written, change, fault):
    found = faults(broken(written, change))
    assert any(fault in one for one in found), found


@pytest.mark.parametrize(
    "change",
    [
        lambda m: m.update(name="ct measure"),
        lambda m: m["contributions"]["commands"][0].update(colour="red"),
        lambda m: m["contributions"]["commands"][0].update(python_name="no-module:A"),
        lambda m: m["contributions"]["commands"][0].update(id="other.read"),
        lambda m: m["contributions"]["configurations"]["reading"]["properties"]["single_file"].pop(
            "title"
        ),
    ],
)
def test_a_manifest_against_the_schema_is_red(written, change, tmp_path):
    wrong = copy.deepcopy(written)
    change(wrong)
    file = tmp_path / "napari.yaml"
    file.write_text(yaml.safe_dump(wrong), encoding="utf-8")
    assert CliRunner().invoke(app, ["validate", str(file)]).exit_code != 0
    file.write_text(yaml.safe_dump(written), encoding="utf-8")
    assert CliRunner().invoke(app, ["validate", str(file)]).exit_code == 0


def test_a_name_unlike_the_distribution_is_red(written):
    """npe2 finds the manifest by the distribution's name; the two must agree to the letter."""
    found = PluginManifest.from_distribution(NAME)
    assert found.name == NAME == written["name"]
    assert found.package_version == ct_measure_plugin.__version__


FRESH = """
import json, sys
import napari, napari.plugins
from npe2 import PluginManager
manager = PluginManager.instance()
manager.discover()
assert "ct-measure-plugin" in manager
{more}
heavy = ("ct_measure_plugin", "pydicom", "scipy", "qtpy", "PySide6", "matplotlib", "pyqtgraph")
print(json.dumps([name for name in heavy if name in sys.modules]))
"""


def loaded_after(more: str) -> list[str]:
    """Return which heavy packages a fresh process has after napari found its plugins."""
    program = FRESH.format(more=more)
    done = subprocess.run(
        [sys.executable, "-c", program], capture_output=True, text=True, check=True, timeout=60
    )
    return json.loads(done.stdout.splitlines()[-1])


def test_napari_s_start_imports_nothing_of_ours():
    assert loaded_after("") == []


def test_asking_the_reader_imports_nothing_heavy():
    """napari asks it about every file that anyone opens."""
    asking = "from ct_measure_plugin.viewer.hooks import get_reader; get_reader(sys.executable)"
    assert loaded_after(asking) == ["ct_measure_plugin"]


def test_a_heavy_import_would_be_seen():
    assert "pydicom" in loaded_after("import pydicom")


def test_every_dock_has_its_section_in_the_docs(written):
    page = (FILE.parents[2] / "docs/measurement_docks.md").read_text(encoding="utf-8")
    titles = [dock.title for dock in docks(written) if dock.title != "All measurements"]
    assert [title for title in titles if f"\n## {title}\n" not in page] == []
