"""What the constraints pin can be installed where the project promises to run."""

from __future__ import annotations

import re
from importlib.metadata import PackageNotFoundError, metadata, version
from pathlib import Path

import pytest
from packaging.specifiers import SpecifierSet

#: Python of Debian 12 (its package python3.11 is 3.11.2): the bare machine of the README.
DEBIAN_PYTHON = "3.11.2"
PINS = dict(
    re.findall(
        r"^([\w.-]+)==(\S+)$",
        (Path(__file__).parents[1] / "constraints.txt").read_text(encoding="utf-8"),
        re.MULTILINE,
    )
)


def test_there_are_pins():
    assert len(PINS) > 100


def accepts(wanted: str | None) -> bool:
    return wanted is None or SpecifierSet(wanted).contains(DEBIAN_PYTHON)


def test_a_pin_that_needs_a_later_python_is_red():
    assert not accepts(">=3.11.5")
    assert accepts(">=3.8")


def is_here(name: str) -> bool:
    """Tell whether this environment holds what is pinned, not another extra's or platform's."""
    try:
        return version(name) == PINS[name]
    except PackageNotFoundError:
        return False


HERE = sorted(filter(is_here, PINS))


def test_the_environment_is_made_by_the_pins():
    assert len(HERE) > 100


@pytest.mark.parametrize("name", HERE)
def test_a_pinned_package_takes_the_python_of_debian(name):
    assert accepts(metadata(name).get("Requires-Python"))
