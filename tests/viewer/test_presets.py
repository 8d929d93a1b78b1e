"""Window presets: those that come along, and one's own, kept safely."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.viewer.presets import (
    ANATOMY,
    BUILT_IN,
    OWN,
    QUALITY,
    Preset,
    PresetShelf,
    presets_file,
)


@pytest.fixture
def file(tmp_path):
    return tmp_path / "deep" / "window_presets.json"


def test_presets_come_along_for_anatomy_and_image_quality(file):
    shelf = PresetShelf(file)
    groups = {one.group for one in shelf.all()}
    assert groups == {ANATOMY, QUALITY}
    assert len({one.name for one in shelf.all()}) == len(shelf.all())
    assert not file.exists()


def test_full_scale_runs_over_all_of_twelve_bits():
    from ct_measure_plugin.physics.windowing import limits_of

    full = next(one for one in BUILT_IN if one.name == "Full scale")
    assert limits_of(full.centre, full.width, full.function) == (-1024, 3071)


def test_an_own_preset_is_there_next_time(file):
    PresetShelf(file).save(Preset("Knee", 300, 1200, function="SIGMOID"))
    again = PresetShelf(file)
    assert again.all()[-1] == Preset("Knee", 300, 1200, OWN, "SIGMOID")
    assert again.is_own("Knee")
    assert again.problem == ""


def test_one_that_came_along_can_be_edited_and_restored(file):
    shelf = PresetShelf(file)
    place = [one.name for one in shelf.all()].index("Lung")
    shelf.save(Preset("Lung", -500, 1400))
    changed = PresetShelf(file)
    assert changed.all()[place] == Preset("Lung", -500, 1400, ANATOMY)
    changed.remove("Lung")
    assert PresetShelf(file).all()[place].centre == -600


@pytest.mark.parametrize(
    "text", ["", "{", "[]", '{"presets": 3}', "null", '"x"', "[" * 100_000, "\x00\xff"]
)
def test_a_damaged_file_is_put_aside_not_overwritten(file, text):
    file.parent.mkdir()
    file.write_text(text, encoding="utf-8")
    shelf = PresetShelf(file)
    assert shelf.all() == BUILT_IN
    assert "could not be read" in shelf.problem
    shelf.save(Preset("Knee", 300, 1200))
    assert file.with_suffix(".unreadable.json").read_text(encoding="utf-8") == text
    assert PresetShelf(file).is_own("Knee")


def test_bytes_that_are_no_text_are_put_aside(file):
    file.parent.mkdir()
    file.write_bytes(b"\xff\xfe\x00")
    assert "could not be read" in PresetShelf(file).problem


def test_bad_entries_are_left_out_and_good_ones_kept(file):
    good = {"name": "Knee", "centre": 300, "width": 1200}
    bad = [
        3,
        {},
        {"name": "", "centre": 1, "width": 1},
        {"name": "a", "centre": "x", "width": 1},
        {"name": "b", "centre": 1, "width": -1},
        {"name": "c", "centre": 1, "width": 1e999},
        {"name": "d", "centre": 1, "width": 1, "function": "GAMMA"},
        {"name": "e" * 99, "centre": 1, "width": 1},
    ]
    file.parent.mkdir()
    file.write_text(json.dumps({"presets": [*bad, good]}), encoding="utf-8")
    shelf = PresetShelf(file)
    assert [one.name for one in shelf.all()[len(BUILT_IN) :]] == ["Knee"]
    assert shelf.problem == "Some of your own window presets could not be read."


def test_a_folder_that_cannot_be_written_is_an_error(tmp_path):
    blocked = tmp_path / "file"
    blocked.write_text("")
    with pytest.raises(OSError, match=r".+"):
        PresetShelf(blocked / "window_presets.json").save(Preset("Knee", 300, 1200))


def test_a_preset_must_be_a_window():
    with pytest.raises(ArgumentError, match="'width' must be at least 1 for LINEAR"):
        Preset("thin", 0, 0.5)
    with pytest.raises(ArgumentError, match="'name' must have 1 to 60 characters"):
        Preset(" ", 0, 10)


def test_the_file_lies_in_the_user_s_own_settings():
    assert presets_file().name == "window_presets.json"
    assert presets_file().parent.name == "ct-measure-plugin"


def test_the_page_lists_the_presets_for_image_quality_as_they_are():
    """The docs' table is read back, number for number."""
    page = (Path(__file__).parents[2] / "docs/window.md").read_text(encoding="utf-8")
    start = page.index("| image quality |")
    lines = page[start : page.index("\n\n", start)].splitlines()[2:]
    cells = [[cell.strip() for cell in line.strip("|").split("|")] for line in lines]
    told = [(name, *(float(n.replace("−", "-")) for n in numbers)) for name, *numbers, _ in cells]
    assert told == [(p.name, p.centre, p.width) for p in BUILT_IN if p.group == QUALITY]
