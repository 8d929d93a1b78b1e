"""Whoever runs the tests keeps their own napari settings."""

from __future__ import annotations

import os
from pathlib import Path

import napari.settings as settings_module
from napari.settings import get_settings


def test_settings_are_read_from_the_scratch_folder(make_napari_viewer):
    make_napari_viewer()
    scratch = Path(os.environ["NAPARI_CONFIG"]).parent
    assert "ct-measure-tests-" in scratch.name
    assert Path(settings_module._CFG_PATH).parent == scratch
    path = get_settings().config_path
    assert path is None or scratch in Path(path).parents or "pytest" in str(path)
