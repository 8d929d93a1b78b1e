"""The shipped sample volumes: complete, small, remade byte for byte, and true."""

from __future__ import annotations

import itertools
import math
import os
import subprocess
import sys
import zipfile
from pathlib import Path

import numpy as np
import pydicom
import pytest

from ct_measure_plugin.cli import main
from ct_measure_plugin.errors import Cancelled, NoSeriesError, UnknownNameError
from ct_measure_plugin.virtual_scanner import Truth, samples
from ct_measure_plugin.virtual_scanner import bench_phantom as bench
from ct_measure_plugin.virtual_scanner.sample_table import truth_table
from ct_measure_plugin.virtual_scanner.sections import Blob


def _read(name):
    paths = sorted(samples.folder(name).glob("*.dcm"))
    planes = [pydicom.dcmread(path) for path in paths]
    return np.array([p.pixel_array.astype(float) - 1024.0 for p in planes]), planes


@pytest.mark.parametrize("name", ["standard", "enhanced"])
def test_a_sample_is_remade_byte_for_byte(name, tmp_path):
    """Equal on the machine and libraries that made them.

    Sums run in a fixed order and the projections are rounded to single precision on the way, so
    that another machine should agree; a byte that differs there would be a pixel on the brink of
    rounding.
    """
    made = samples.remake(tmp_path, [name])
    shipped = sorted(samples.folder(name).glob("*.dcm"))
    assert [p.name for p in made] == [p.name for p in shipped]
    for new, old in zip(made, shipped, strict=True):
        assert new.read_bytes() == old.read_bytes(), new.name


def test_the_truth_table_is_the_one_the_recipes_give():
    assert (samples.folder() / "README.md").read_bytes() == truth_table().encode()


def test_all_samples_are_there_and_together_small():
    """25 MB is what a source tree and a wheel can carry."""
    files = [path for name in samples.names() for path in samples.folder(name).iterdir()]
    slices = [
        1 if item.enhanced else len(item.recipe.positions_mm)
        for item in samples.catalogue().values()
    ]
    assert len(files) == sum(slices)
    assert sum(path.stat().st_size for path in files) < 25e6


def test_every_sample_is_marked_simulated_and_of_one_study():
    studies = set()
    for number, name in enumerate(samples.names(), start=1):
        for path in samples.folder(name).glob("*.dcm"):
            header = pydicom.dcmread(path, stop_before_pixels=True)
            assert "SIMULATED" in header.ImageComments
            assert header.SeriesDescription.startswith("SIMULATED")
            assert header.SeriesNumber == number
            studies.add(header.StudyInstanceUID)
    assert len(studies) == 1


def test_the_reference_reads_its_truth():
    """Rod means over three slices: bound plus 4 standard errors of about 0.5 HU each."""
    hu, _ = _read("standard")
    recipe = samples.sample("standard").recipe
    truth = Truth(recipe)
    y, x = recipe.grid.axis_mm(0)[:, None], recipe.grid.axis_mm(1)
    z = np.array(recipe.positions_mm)
    low, high = bench.SECTIONS["rods"]
    rods = hu[(z > low) & (z < high)]
    for insert in bench.material_rods():
        inside = np.hypot(y - insert.centre_mm[0], x - insert.centre_mm[1]) < 3.6
        error = rods[:, inside].mean() - truth.hu(insert.material)
        assert abs(error) < truth.hu_bound(insert.material) + 2.0, insert.material.name
    middle = hu[:8, 118:138, 118:138]
    # 8 patches of 10 mm: some 500 independent areas, 3 % at 1 σ
    assert middle.std() == pytest.approx(truth.noise_sd(), rel=0.1)


def test_dose_rings_and_cup_show():
    full, low = _read("standard")[0][:8], _read("low-dose")[0][:8]
    patch = (slice(None), slice(118, 138), slice(118, 138))
    assert low[patch].std() / full[patch].std() == pytest.approx(2.0, rel=0.12)
    recipe = samples.sample("rings").recipe
    away = np.hypot(recipe.grid.axis_mm(0)[:, None], recipe.grid.axis_mm(1))
    rings = _read("rings")[0].mean(axis=0)
    promised = Truth(recipe).rings(away)
    near = np.abs(away - 10.25) < 1.0
    slope = np.sum(rings[near] * promised[near]) / np.sum(promised[near] ** 2)
    assert slope == pytest.approx(1.0, abs=0.15)
    cup = _read("cup")[0].mean(axis=0)
    truth = Truth(samples.sample("cup").recipe)
    for radius in (5.0, 30.0, 50.0):
        ring = np.abs(away - radius) < 2.0
        expected = truth.water_cup(away[ring], bench.CYLINDER_MM).mean()
        assert cup[ring].mean() == pytest.approx(expected, abs=1.0)


def test_noise_falls_towards_the_rim_as_the_table_says():
    """Rings at 20 and 36 mm, 8 slices each: 2.5 % (some 8000 independent areas: 0.8 % at 1 σ)."""
    axis = samples.sample("standard").recipe.grid.axis_mm(0)
    away = np.hypot(axis[:, None], axis)
    for name in ("standard", "sharp", "low-dose"):
        hu, truth = _read(name)[0][:8], Truth(samples.sample(name).recipe)
        for radius in (20.0, 36.0):
            found = hu[:, np.abs(away - radius) < 4.0].std()
            assert found == pytest.approx(truth.noise_sd((0.0, radius)), rel=0.025)


def test_the_repeat_differs_from_the_reference_in_noise_only():
    first, second = (_read(name)[0] for name in ("standard", "repeat"))
    difference = second - first
    inner = difference[:, 60:200, 60:200]
    assert abs(inner.mean()) < 0.1
    sd = Truth(samples.sample("standard").recipe).noise_sd()
    assert 1.2 < inner.std() / sd < 1.45  # √2 at the centre, a little less outwards


def test_the_phantoms_parts_keep_apart_and_inside():
    """Parts that replace water must not overlap, or the line integrals would count twice."""
    groups = (bench.edge_blocks(), bench.material_rods(), bench.faint_discs())
    for group in groups:
        half = [i.size_mm * (math.sqrt(0.5) if i.lean_deg else 0.5) for i in group]
        for (a, ra), (b, rb) in itertools.combinations(zip(group, half, strict=True), 2):
            gap = math.dist(a.centre_mm, b.centre_mm) - ra - rb
            assert gap > 1.0, (a.material.name, b.material.name)
        for insert, radius in zip(group, half, strict=True):
            assert math.hypot(*insert.centre_mm) + radius < bench.CYLINDER_MM - 4.0
    # the fine parts, over all of their section
    fine = list(bench.fine_parts())
    for z_mm in np.linspace(42.6, 57.4, 12):
        cuts = [c for c in (part.solid.at(float(z_mm)) for part in fine) if c is not None]
        assert not any(isinstance(cut, Blob) for cut in cuts)
        for cut in cuts:
            assert math.hypot(*cut.centre_mm) + cut.reach_mm < bench.CYLINDER_MM - 4.0
        for a, b in itertools.combinations(cuts, 2):
            assert math.dist(a.centre_mm, b.centre_mm) > a.reach_mm + b.reach_mm


def test_unknown_and_absent_samples_are_said_so(monkeypatch, tmp_path):
    with pytest.raises(UnknownNameError, match=r"'soft'; there are: standard, sharp, low-dose"):
        samples.folder("soft")
    monkeypatch.setattr(samples, "_root", lambda: tmp_path / "nowhere")
    with pytest.raises(NoSeriesError, match="ct-measure simulate --samples FOLDER"):
        samples.folder("standard")


def test_remaking_reports_progress_over_all_series_and_can_be_stopped(tmp_path):
    seen = []
    samples.remake(tmp_path, ["enhanced", "cup"], progress=lambda *count: seen.append(count))
    assert seen == [(done, 12) for done in range(1, 13)]
    with pytest.raises(Cancelled):
        samples.remake(tmp_path, ["cup"], cancel=lambda: True)


def test_the_command_lists_and_makes_samples(tmp_path, capsys):
    assert main(["simulate", "--list"]) == 0
    listed = capsys.readouterr().out
    for name in samples.names():
        assert name in listed
    assert main(["simulate", "--samples", str(tmp_path), "--only", "enhanced"]) == 0
    assert "Wrote 1 files" in capsys.readouterr().out
    new = (tmp_path / "enhanced" / "frames.dcm").read_bytes()
    assert new == (samples.folder("enhanced") / "frames.dcm").read_bytes()
    assert main(["simulate", "--samples", str(tmp_path), "--only", "soft"]) == 2
    assert "no sample volume is called 'soft'" in capsys.readouterr().err


@pytest.mark.long  # builds a wheel, which fetches the build backend
def test_the_samples_are_in_the_wheel(tmp_path):
    """Unpacked where nothing else of the source tree is, the wheel finds and measures them."""
    root = Path(__file__).parents[2]
    build = [sys.executable, "-m", "build", "--wheel", "--outdir", str(tmp_path), str(root)]
    subprocess.run(build, check=True, capture_output=True)
    [wheel] = tmp_path.glob("*.whl")
    place = tmp_path / "installed"
    zipfile.ZipFile(wheel).extractall(place)
    command = [sys.executable, "-m", "ct_measure_plugin.cli", "demo", "--no-window", "--out", "out"]
    env = {**os.environ, "PYTHONPATH": str(place)}
    done = subprocess.run(
        command, check=True, capture_output=True, text=True, cwd=tmp_path, env=env
    )
    assert "PTFE rod" in done.stdout
    where = "from ct_measure_plugin.virtual_scanner import samples; print(samples.folder())"
    found = subprocess.run(
        [sys.executable, "-c", where], check=True, capture_output=True, text=True, env=env
    )
    assert Path(found.stdout.strip()) == place / "ct_measure_plugin" / "sample_volumes"
