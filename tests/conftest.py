"""What every test shares: the switch that adds the long ones."""

from __future__ import annotations

import pytest


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--long", action="store_true", help="run the tests marked long as well")


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    if config.getoption("--long"):
        return
    skip = pytest.mark.skip(reason="long; run with --long")
    for item in items:
        if item.get_closest_marker("long") is not None:
            item.add_marker(skip)
