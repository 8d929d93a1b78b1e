"""`ct-measure series`: which CT series lie under a folder, and what is odd about them."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING, Any

from ct_measure_plugin.cli import DONE

if TYPE_CHECKING:
    import argparse

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

    scan = scan_folder(arguments.folder)
    if arguments.json:
        series = [_facts(i, entry) for i, entry in enumerate(scan.entries)]
        print(json.dumps({"series": series, "skipped": scan.reasons()}, indent=1))
        return DONE
    for i, entry in enumerate(scan.entries):
        print(f"[{i}] {entry.label}")
        for caution in entry.cautions:
            print(f"      {caution.kind.level}: {caution}")
    if not scan.entries:
        print("No CT series found.")
    for reason, count in scan.reasons().items():
        print(f"skipped {count} file{'s' * (count != 1)}: {reason}")
    return DONE


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
