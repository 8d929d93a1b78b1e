"""Whatever happens to a file: an entry or one sentence, in bounded time and memory."""

from __future__ import annotations

import json
import os
import struct
import subprocess
import sys
from pathlib import Path

import mutation_battery
import mutations
import pytest
import series_writer as sw

from ct_measure_plugin.dicom import read, scan
from ct_measure_plugin.errors import SeriesError

HERE = Path(__file__).parent
#: reading 32 × 32 planes takes none to speak of; what a damaged length claims must not be taken
MEMORY_MB = 200


def outcome(folder: Path, count: int, seed: int) -> dict:
    """Run the battery as a program of its own: a decoder that crashes must not end the suite."""
    command = [sys.executable, str(HERE / "mutation_battery.py"), str(count), str(seed)]
    done = subprocess.run(
        [*command, str(folder)], capture_output=True, text=True, env=os.environ, check=False
    )
    assert done.returncode == 0, done.stderr[-4000:]
    return json.loads(done.stdout)


def require_sound(found: dict, count: int) -> None:
    assert found["failed"] == 0, "\n".join(found["failures"])
    assert found["logged"] == 0
    assert found["grown_mb"] < MEMORY_MB
    # the battery means something: every mutator acted, and files fared differently
    assert sum(found["fates"].values()) == count
    assert set(found["mutators"]) == {mutator.__name__ for mutator in mutations.MUTATORS}
    for fate in ("read", "refused", "failed"):
        assert found["fates"][fate] > count / 50


def test_mutated_files_get_an_entry_or_a_sentence(tmp_path):
    require_sound(outcome(tmp_path, 2200, seed=1), 2200)


@pytest.mark.long
@pytest.mark.parametrize("seed", [2, 3, 4, 5])
def test_many_more_mutated_files_do_too(tmp_path, seed):
    require_sound(outcome(tmp_path, 12_000, seed), 12_000)


@pytest.mark.parametrize(
    ("where", "name", "breaking"),
    [
        pytest.param(scan, "read_header", struct.error("8 bytes"), id="stray error"),
        pytest.param(read, "load_all", SeriesError("XMARKX has no file"), id="name in an error"),
        pytest.param(read, "load_all", SeriesError("one thing\nand another"), id="two lines"),
    ],
)
def test_a_room_that_stumbles_is_red(tmp_path, monkeypatch, where, name, breaking):
    whole = {sw.save(mutation_battery.slice_of(k), tmp_path / f"whole {k}"): k for k in (0, 2)}
    (tmp_path / "mutated").write_bytes(b"")
    assert mutation_battery.examine(tmp_path, whole) == "refused"

    def stumble(*_: object, **__: object) -> None:
        raise breaking

    monkeypatch.setattr(where, name, stumble)
    with pytest.raises((struct.error, AssertionError), match=r"8 bytes|names nobody|one line"):
        mutation_battery.examine(tmp_path, whole)


def test_a_whole_file_that_is_passed_over_is_red(tmp_path):
    whole = {sw.save(mutation_battery.slice_of(k), tmp_path / f"whole {k}"): k for k in (0, 2)}
    next(iter(whole)).write_bytes(b"")
    with pytest.raises(AssertionError, match="whole files are never passed over"):
        mutation_battery.examine(tmp_path, whole)
