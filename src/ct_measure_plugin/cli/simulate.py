"""`ct-measure simulate`: make the sample volumes again, to the byte."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import TYPE_CHECKING

from ct_measure_plugin.cli import DONE

if TYPE_CHECKING:
    import argparse

__all__ = ["add_parser", "run"]


def add_parser(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the subcommand."""
    parser = commands.add_parser(
        "simulate", help="make the sample volumes with the virtual scanner"
    )
    task = parser.add_mutually_exclusive_group(required=True)
    task.add_argument("--samples", metavar="FOLDER", help="where to write them")
    task.add_argument("--list", action="store_true", help="say which there are, and make none")
    parser.add_argument("--only", metavar="NAME", action="append", help="only this one; repeatable")
    parser.set_defaults(run=run)


def run(arguments: argparse.Namespace) -> int:
    """Simulate and write."""
    from ct_measure_plugin.virtual_scanner import samples

    def show(done: int, total: int) -> None:
        if sys.stderr.isatty():
            print(f"\r{done}/{total} slices", end="", file=sys.stderr)

    if arguments.list:
        for item in samples.catalogue().values():
            print(f"{item.name:12} {item.title}. {item.purpose}")
        return DONE
    written = samples.remake(Path(arguments.samples), arguments.only, progress=show)
    print(f"Wrote {len(written)} files to {arguments.samples}")
    return DONE
