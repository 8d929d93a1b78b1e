"""`ct-measure logbook`: look into the logbook, and take records out of it."""

from __future__ import annotations

from typing import TYPE_CHECKING

from ct_measure_plugin.cli.outputs import add_output_options, deliver
from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    import argparse

__all__ = ["add_parser", "run"]


def add_parser(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the subcommand."""
    parser = commands.add_parser("logbook", help="show or export records of the logbook")
    parser.add_argument("--place", help="a file or a database URL; default the user's own")
    parser.add_argument("--measurement", help="only records of this measurement")
    parser.add_argument("--last", type=int, metavar="N", help="only the newest N")
    add_output_options(parser)
    parser.set_defaults(run=run)


def run(arguments: argparse.Namespace) -> int:
    """Show or export."""
    from ct_measure_plugin.records import Logbook

    if arguments.last is not None and arguments.last < 1:
        raise ArgumentError("last", "must be at least 1", arguments.last)
    with Logbook(arguments.place) as book:
        records = book.find(measurement=arguments.measurement, limit=arguments.last)
    if not records and not arguments.json:
        print("No records.")
    return deliver(records, arguments, None)
