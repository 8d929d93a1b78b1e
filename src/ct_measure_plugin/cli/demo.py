"""`ct-measure demo`: measure a sample volume and write a report; show both on a screen."""

from __future__ import annotations

import importlib.util
import os
import subprocess
import sys
from pathlib import Path
from typing import TYPE_CHECKING

from ct_measure_plugin.cli import DONE
from ct_measure_plugin.cli.outputs import print_records

if TYPE_CHECKING:
    import argparse

__all__ = ["add_parser", "run"]


def add_parser(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the subcommand."""
    parser = commands.add_parser("demo", help="measure a sample volume and write a report")
    parser.add_argument("--out", default="ct-measure-demo", help="folder for the results")
    parser.add_argument("--no-window", action="store_true", help="do not open napari")
    parser.set_defaults(run=run)


def run(arguments: argparse.Namespace) -> int:
    """Measure, write, show."""
    from ct_measure_plugin.dicom import read_series
    from ct_measure_plugin.records import load_plan, write_csv, write_json
    from ct_measure_plugin.report import write_report
    from ct_measure_plugin.run import run_plan
    from ct_measure_plugin.virtual_scanner import samples

    folder = samples.folder("standard")
    plan = load_plan(samples.folder() / "demo_plan.yaml")
    records = run_plan(plan, read_series(folder))
    out = Path(arguments.out)
    out.mkdir(parents=True, exist_ok=True)
    print_records(records)
    write_csv(records, out / "records.csv")
    write_json(records, out / "records.json")
    page = write_report(records, out / "report.html", title=plan.title)
    print(f"\nReport: {page}")
    print(f"Table:  {page.with_name('records.csv')}")
    if not arguments.no_window:
        _show(folder, page.with_name("records.json"))
    return DONE


def _show(folder: Path, records: Path) -> None:
    """Open napari in a process of its own, or say what it would take."""
    missing = [name for name in ("napari", "qtpy") if importlib.util.find_spec(name) is None]
    display = sys.platform in ("win32", "darwin") or any(
        os.environ.get(name) for name in ("DISPLAY", "WAYLAND_DISPLAY")
    )
    if not display:
        print("No display: measured without a window.")
    elif missing:
        print("To see it in napari: pip install 'ct-measure-plugin[viewer]'")
    else:
        viewer = [sys.executable, "-m", "ct_measure_plugin.viewer.demo", str(folder)]
        subprocess.run([*viewer, "--records", str(records)], check=False)  # noqa: S603 - our own module
