"""`ct-measure series`: which CT series lie under a folder, and what is odd about them."""

from __future__ import annotations

import json
import os
from typing import TYPE_CHECKING, Any

from ct_measure_plugin.cli import DONE
from ct_measure_plugin.cli.choosing import must_exist

if TYPE_CHECKING:
    import argparse
    from pathlib import Path

    from ct_measure_plugin.dicom import SeriesEntry

__all__ = ["add_parser", "run"]


def add_parser(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the subcommand."""
    parser = commands.add_parser("series", help="list the CT series under a folder")
    parser.add_argument("folder", help="a folder, a DICOMDIR, or one file of a series")
    parser.add_argument("--json", action="store_true", help="print JSON")
    parser.set_defaults(run=run)


def run(arguments: argparse.Namespace) -> int:
    """List the series."""
    from ct_measure_plugin.dicom import scan_folder

    must_exist(arguments.folder)
    scan = scan_folder(arguments.folder)
    if arguments.json:
        series = [_facts(i, entry) for i, entry in enumerate(scan.entries)]
        print(json.dumps({"series": series, "skipped": scan.reasons()}, indent=1))
        return DONE
    for i, entry in enumerate(scan.entries):
        print(f"[{i}] {entry.label}{_dose(entry)}, in {_below(entry.folder, arguments.folder)}")
        for caution in entry.cautions:
            print(f"      {caution.kind.level}: {caution}")
    if not scan.entries:
        print("No CT series found.")
    for reason, count in scan.reasons().items():
        print(f"skipped {count} file{'s' * (count != 1)}: {reason}")
    return DONE


def _dose(entry: SeriesEntry) -> str:
    """Return the tube load and dose index, if stated: a line that tells dose levels apart."""
    named = ((entry.mas, "mAs"), (entry.ctdi_vol_mgy, "mGy CTDIvol"))
    return "".join(
        f", {low:g} {unit}" if low == high else f", {low:g} to {high:g} {unit}"
        for (low, high), unit in ((span, unit) for span, unit in named if span is not None)
    )


def _below(folder: Path, top: str) -> str:
    """Return a folder as seen from the one that was asked about."""
    return os.path.relpath(folder, top if os.path.isdir(top) else os.path.dirname(top) or ".")


def _facts(index: int, entry: SeriesEntry) -> dict[str, Any]:
    """Return what may leave the house; the description stays, since it is free text."""
    return {
        "index": index,
        "digest": entry.digest,
        "kernel": entry.kernel,
        "kvp": entry.kvp,
        "mas": entry.mas,
        "ctdi_vol_mgy": entry.ctdi_vol_mgy,
        "thickness_mm": entry.thickness_mm,
        "slices": entry.slice_count,
        "matrix": entry.matrix,
        "spacing_mm": entry.spacing_mm,
        "tilt_deg": entry.tilt_deg,
        "unit": entry.unit,
        "decoder": entry.decoder,
        "decoder_missing": entry.decoder_missing,
        "cautions": [{"code": c.code, "text": c.text, "remedy": c.remedy} for c in entry.cautions],
    }
