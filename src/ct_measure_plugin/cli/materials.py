"""`ct-measure materials`: the list of materials, what each should read, and a copy to edit."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING

from ct_measure_plugin.cli import DONE
from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    import argparse

__all__ = ["add_parser", "run"]


def add_parser(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the subcommand."""
    parser = commands.add_parser("materials", help="list materials, or copy the list to edit it")
    parser.add_argument("file", nargs="?", help="a list of your own; it is checked as it is read")
    parser.add_argument(
        "--energy", type=float, default=70.0, metavar="KEV", help="energy of the CT numbers shown"
    )
    parser.add_argument("--copy", metavar="FILE", help="write the shipped list there, to be edited")
    parser.add_argument("--json", action="store_true", help="print JSON")
    parser.set_defaults(run=run)


def run(arguments: argparse.Namespace) -> int:
    """List the materials, or copy the shipped list."""
    from ct_measure_plugin.measurements.materials import SHIPPED, load_materials

    if arguments.copy:
        target = Path(arguments.copy)
        if target.exists():
            raise ArgumentError("copy", "must be a file that does not exist yet", target.name)
        target.write_text(SHIPPED.read_text(encoding="utf-8"), encoding="utf-8")
        return DONE
    entries = load_materials(arguments.file or SHIPPED)
    found = [
        {
            "name": entry.name,
            "density_g_cm3": entry.density_g_cm3,
            "density_uncertainty_g_cm3": entry.density_uncertainty_g_cm3,
            "expected_hu": float(entry.material().hu(arguments.energy)),
            "source": entry.source,
        }
        for entry in entries
    ]
    if arguments.json:
        print(json.dumps({"energy_kev": arguments.energy, "materials": found}, ensure_ascii=False))
        return DONE
    print(f"{'material':<20} {'g/cm³':>9} {'±':>9} {f'HU at {arguments.energy:g} keV':>16}  source")
    for line in found:
        print(
            f"{line['name']:<20} {line['density_g_cm3']:>9g}"
            f" {line['density_uncertainty_g_cm3']:>9g} {line['expected_hu']:>16.1f}"
            f"  {line['source']}"
        )
    return DONE
