"""`ct-measure measure … --against`: the same regions on a second series, and what changed."""

from __future__ import annotations

from typing import TYPE_CHECKING

from ct_measure_plugin.cli.choosing import series_at
from ct_measure_plugin.cli.outputs import deliver

if TYPE_CHECKING:
    import argparse

    from ct_measure_plugin.measurements import Comparison
    from ct_measure_plugin.physics.volume import Volume
    from ct_measure_plugin.records import Plan

__all__ = ["add_against_options", "measure_against"]


def add_against_options(parser: argparse.ArgumentParser) -> None:
    """Add the options that name a second series."""
    parser.add_argument(
        "--against",
        metavar="SERIES",
        help="measure the same regions on a second series, and tell what changed",
    )
    parser.add_argument("--against-index", metavar="N", help="which one, where that holds several")
    parser.add_argument("--changes", metavar="FILE", help="write the changes as CSV")


def measure_against(plan: Plan, first: Volume, arguments: argparse.Namespace) -> int:
    """Measure both series, print the changes, and return the exit code."""
    from ct_measure_plugin.errors import ArgumentError
    from ct_measure_plugin.records import Frame, change_rows, write_changes
    from ct_measure_plugin.run import run_against

    second = series_at(arguments.against, arguments.against_index)
    if problem := Frame.of(first).problem(second):
        raise ArgumentError("against", f"must share the first's frame: {problem}", "another")
    records, steps = run_against(plan, first, second)
    rows = [row for name, found in steps for row in change_rows(name, found)]
    if arguments.changes:
        write_changes(rows, arguments.changes)
    # limits are judged on the first series; the second only shows what changed
    if not arguments.json:
        for name, found in steps:
            for one in found:
                _print_change(name, one, everything=arguments.all)
    return deliver(records, arguments, None, rows)


def _print_change(name: str, one: Comparison, *, everything: bool) -> None:
    """Print one region as a table: each number on both series, and its change."""
    from ct_measure_plugin.measurements import find
    from ct_measure_plugin.physics.results import NotMeasured, label_of

    measurement = find(name)
    print(f"{measurement.title}: {', '.join(region.name or region.kind for region in one.regions)}")
    shown = list(one.differences if everything else measurement.columns)
    lines = [("", "first", "second", "change")]
    for called in (name for name in shown if name in one.differences):
        pairs = " (paired)" if called in one.paired else ""
        before, after = (str(getattr(answer, called)) for answer in (one.first, one.second))
        lines.append((label_of(called), before, after, f"{one.differences[called]}{pairs}"))
    widths = [max(len(line[i]) for line in lines) for i in range(4)]
    if len(lines) > 1:
        for line in lines:
            cells = (f"{cell:<{width}}" for cell, width in zip(line, widths, strict=True))
            print(f"  {'  '.join(cells).rstrip()}")
    for which, answer in (("first", one.first), ("second", one.second)):
        if isinstance(answer, NotMeasured):
            print(f"  {which}: {answer}")
        for caution in answer.cautions:
            print(f"  {which}, {caution.kind.level}: {caution}")
