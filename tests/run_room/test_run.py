"""A number is the same through every door."""

from __future__ import annotations

import subprocess
import sys
from dataclasses import replace

import numpy as np
import pytest
from examples import EXAMPLES

from ct_measure_plugin.errors import Cancelled
from ct_measure_plugin.measurements import NAMES, measure
from ct_measure_plugin.measurements.catalogue import settings_for
from ct_measure_plugin.physics.regions import Disc
from ct_measure_plugin.physics.results import quantities_of
from ct_measure_plugin.physics.volume import Volume
from ct_measure_plugin.records import Record, write_json
from ct_measure_plugin.records.plan import plan_from_dict
from ct_measure_plugin.run import content_digest, replay, run_measurement, run_plan

PLAN = plan_from_dict(
    {
        "steps": [
            {
                "measurement": "region_statistics",
                "regions": [
                    {"kind": "disc", "center_mm": [15, 15], "radius_mm": 6, "z_mm": 2},
                    {"kind": "disc", "center_mm": [15, 20], "radius_mm": 6, "z_mm": 2},
                ],
            }
        ]
    }
)


@pytest.mark.parametrize("name", NAMES)
def test_a_record_replays_to_the_last_bit(name):
    example = EXAMPLES[name]()
    direct = measure(name, example.volume, example.regions, **example.settings)
    settings = settings_for(name, example.settings)
    records = run_measurement(name, example.volume, example.regions, settings)
    again = [replay(record, example.volume) for record in records]
    assert [r.result for r in again] == [r.result for r in records]
    if len(records) == 1:
        assert quantities_of(records[0].answer()) == quantities_of(direct)


def test_another_process_finds_the_same_bits(tmp_path):
    example = EXAMPLES["region_statistics"]()
    records = run_measurement("region_statistics", example.volume, example.regions)
    write_json(records, tmp_path / "records.json")
    np.save(tmp_path / "hu.npy", example.volume.hu)
    code = (
        "import numpy as np, sys, ct_measure_plugin as ctm\n"
        "from ct_measure_plugin.records import read_json\n"
        "from ct_measure_plugin.run import replay\n"
        "volume = ctm.Volume(np.load(sys.argv[1]), (2.0, 0.5, 0.5))\n"
        "print(replay(read_json(sys.argv[2])[0], volume).model_dump_json())"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, str(tmp_path / "hu.npy"), str(tmp_path / "records.json")],
        capture_output=True, text=True, check=True, timeout=120,
    )  # fmt: skip
    assert Record.model_validate_json(done.stdout).result == records[0].result


def test_a_plan_gives_one_record_a_region_and_tells_how_far_it_is():
    seen = []
    records = run_plan(
        PLAN, EXAMPLES["region_statistics"]().volume, progress=lambda *a: seen.append(a)
    )
    assert len(records) == 2
    assert seen == [(1, 1)]
    assert all(len(record.source.content_digest) == 64 for record in records)


def test_a_plan_can_be_stopped():
    with pytest.raises(Cancelled):
        run_plan(PLAN, EXAMPLES["region_statistics"]().volume, cancel=lambda: True)


def test_the_digest_knows_pixels_and_geometry_only():
    hu = np.arange(60, dtype=np.int16).reshape(3, 4, 5)
    volume = Volume(hu, (1, 1, 1))
    same = content_digest(replace(volume, hu=hu.astype(np.int32)))
    assert content_digest(volume) == same
    other = hu.copy()
    other[2, 3, 4] += 1
    assert content_digest(replace(volume, hu=other)) != same
    assert content_digest(Volume(hu, (1, 1, 2))) != same


def test_the_preview_lies_where_the_slice_lies():
    hu = np.zeros((3, 600, 300), np.int16)
    hu[1, :, 150:] = 1000
    volume = Volume(hu, (2.0, 0.5, 0.5), origin_mm=(10.0, -20.0, 30.0))
    [record] = run_measurement("region_statistics", volume, [Disc((50, 60), 9, z_mm=12.0)])
    preview = record.preview
    assert preview is not None
    assert preview.z_mm == 12.0
    assert max(preview.shape) <= 256
    assert preview.extent_mm[0] == pytest.approx(-20.0 - 0.75)
    assert preview.extent_mm[3] == pytest.approx(30.0 + 300 * 0.5 - 0.75, abs=1.5)


def test_workers_find_the_same_bits(tmp_path):
    """A local Dask cluster of one worker thread."""
    import distributed

    from ct_measure_plugin.run.one import run_plan as here

    volume = EXAMPLES["region_statistics"]().volume
    with (
        distributed.LocalCluster(
            n_workers=1, threads_per_worker=1, processes=False, dashboard_address=None
        ) as cluster,
        distributed.Client(cluster) as client,
    ):
        there = client.submit(run_plan, PLAN, volume).result(timeout=60)
    assert [r.result for r in there] == [r.result for r in here(PLAN, volume)]
