"""Rooms import one way, and the contract is red when they do not."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]


def lint(tree: Path) -> subprocess.CompletedProcess[str]:
    program = Path(sys.executable).with_name("lint-imports")
    return subprocess.run(
        [str(program), "--no-cache", "--config", str(tree / "pyproject.toml")],
        cwd=tree,
        env={**os.environ, "PYTHONPATH": str(tree / "src")},
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )


@pytest.fixture
def copy(tmp_path):
    shutil.copytree(
        ROOT / "src", tmp_path / "src", ignore=shutil.ignore_patterns("__pycache__", "*.egg-info")
    )
    shutil.copy(ROOT / "pyproject.toml", tmp_path / "pyproject.toml")
    return tmp_path


def test_the_tree_keeps_the_contract():
    done = lint(ROOT)
    assert done.returncode == 0, done.stdout


@pytest.mark.parametrize(
    ("room", "line", "broken"),
    [
        ("physics", "from ct_measure_plugin import measurements", "rooms import one way"),
        ("physics", "import pydicom", "physics knows numpy"),
        ("measurements", "import pydicom", "pydicom stays"),
        ("records", "import qtpy", "napari and Qt stay"),
        ("cli", "import napari", "napari and Qt stay"),
        ("viewer", "import qtpy", "Qt only in docks"),
        ("records", "import matplotlib", "matplotlib and jinja2"),
        ("cli", "from ct_measure_plugin import viewer", "rooms import one way"),
    ],
)
def test_a_wrong_import_is_red(copy, room, line, broken):
    (copy / "src/ct_measure_plugin" / room / "canary.py").write_text(line + "\n")
    done = lint(copy)
    assert done.returncode != 0
    verdicts = [text for text in done.stdout.splitlines() if text.startswith(broken)]
    assert any("BROKEN" in verdict for verdict in verdicts)


def test_a_new_room_must_be_given_a_place(copy):
    """`exhaustive`: a folder that no layer names is red until someone gives it a place."""
    room = copy / "src/ct_measure_plugin/attic"
    room.mkdir()
    (room / "__init__.py").write_text("")
    assert lint(copy).returncode != 0


def test_qt_in_the_hooks_is_red(copy):
    hooks = copy / "src/ct_measure_plugin/viewer/hooks.py"
    hooks.write_text(hooks.read_text() + "\nimport qtpy\n")
    done = lint(copy)
    assert done.returncode != 0
    assert "Qt only in docks and plots BROKEN" in done.stdout
