"""What every measuring command does with its records: print them, write them, judge them."""

from __future__ import annotations

import json
import sys
from typing import TYPE_CHECKING

from ct_measure_plugin.cli import DONE, NOT_MEASURABLE, TOLERANCE_FAILED

if TYPE_CHECKING:
    import argparse
    from collections.abc import Sequence

    from ct_measure_plugin.physics.results import Curve
    from ct_measure_plugin.physics.tables import Table
    from ct_measure_plugin.records import Plan, Record

__all__ = ["add_logbook_option", "add_output_options", "deliver", "print_records"]


def add_output_options(parser: argparse.ArgumentParser) -> None:
    """Add the options that say where records go."""
    parser.add_argument("--all", action="store_true", help="print every number, not the chief ones")
    parser.add_argument("--json", action="store_true", help="print the records as JSON")
    parser.add_argument("--csv", metavar="FILE", help="write a table, one row a quantity")
    parser.add_argument("--save", metavar="FILE", help="write the records as JSON")
    parser.add_argument("--report", metavar="FILE", help="write a one-page HTML report")


def add_logbook_option(parser: argparse.ArgumentParser) -> None:
    """Add the option that keeps records in a logbook."""
    parser.add_argument(
        "--logbook",
        metavar="PLACE",
        nargs="?",
        const="",
        help="add the records to the logbook: the user's own, a file, or a URL",
    )


def deliver(
    records: Sequence[Record],
    arguments: argparse.Namespace,
    plan: Plan | None,
    changes: Sequence[dict[str, str]] | None = None,
) -> int:
    """Print and write the records, and return the exit code that they deserve.

    With rows of changes between two series, JSON holds both, and words are the caller's.
    """
    from ct_measure_plugin.records import Logbook, write_csv, write_json

    if arguments.csv:
        write_csv(records, arguments.csv)
    if arguments.save:
        write_json(records, arguments.save)
    if arguments.report:
        from ct_measure_plugin.report import write_report

        write_report(records, arguments.report)
    if getattr(arguments, "logbook", None) is not None:
        with Logbook(arguments.logbook or None) as book:
            book.add(records)
    if arguments.json:
        data: object = [record.model_dump(mode="json", exclude={"preview"}) for record in records]
        if changes is not None:
            data = {"records": data, "changes": changes}
        print(json.dumps(data, indent=1, ensure_ascii=False))
    elif changes is None:
        print_records(records, everything=arguments.all)
    return _code(records, plan, quiet=arguments.json)


def print_records(records: Sequence[Record], *, everything: bool = False) -> None:
    """Print each record in words, its refusals and warnings with it.

    Every number, or those worth a column in a narrow table.
    """
    from ct_measure_plugin.measurements import find
    from ct_measure_plugin.physics.results import (
        NotMeasured,
        curves_of,
        label_of,
        quantities_of,
    )
    from ct_measure_plugin.physics.tables import tables_of

    for record in records:
        print(": ".join(filter(None, (record.title, record.region_names))))
        answer = record.answer()
        if isinstance(answer, NotMeasured):
            print(f"  {answer}")
        else:
            found = quantities_of(answer)
            measurement = find(record.measurement)
            order = [name for name in measurement.columns if name in found]
            rest = [name for name in found if name not in order]
            order += rest if everything else []
            width = max(len(label_of(name)) for name in order) if order else 0
            for name in order:
                print(f"  {label_of(name):<{width}}  {found[name]}")
            for name, curve in curves_of(answer).items():
                if name in measurement.lists:
                    _print_list(label_of(name), curve)
            for name, table in tables_of(answer).items():
                _print_table(label_of(name), table)
            if rest and not everything:
                print(f"  and {len(rest)} more, in the files and with --all")
        for caution in answer.cautions:
            print(f"  {caution.kind.level}: {caution}")


def _print_list(label: str, curve: Curve) -> None:
    """Print a curve that is rather a list of numbers, such as percentiles."""
    unit = f" {curve.x_unit}".rstrip()
    rows = ", ".join(f"{x:g}{unit}: {y}" for x, y in curve.samples())
    print(f"  {label} ({curve.x_name or 'number'}): {rows}")


def _print_table(label: str, table: Table) -> None:
    """Print a result's own table, its columns aligned."""
    rows = [table.titles, *table.cells()]
    widths = [max(len(row[k]) for row in rows) for k in range(len(table.columns))]
    print(f"  {label}")
    for row in rows:
        cells = (f"{cell:<{width}}" for cell, width in zip(row, widths, strict=True))
        print(f"    {'  '.join(cells)}".rstrip())


def _code(records: Sequence[Record], plan: Plan | None, *, quiet: bool) -> int:
    from ct_measure_plugin.physics.results import NotMeasured

    failed = _judge(records, plan, quiet=quiet) if plan else False
    refusals = [a for a in (record.answer() for record in records) if isinstance(a, NotMeasured)]
    for refusal in refusals:
        print(f"ct-measure: {refusal}", file=sys.stderr)
    if refusals:
        return NOT_MEASURABLE
    return TOLERANCE_FAILED if failed else DONE


def _judge(records: Sequence[Record], plan: Plan, *, quiet: bool) -> bool:
    """Print each tolerance's verdict; return whether one failed."""
    from ct_measure_plugin.records.verdicts import verdicts_of

    failed = False
    for line, passed in verdicts_of(records, plan):
        failed = failed or not passed
        if not quiet:
            print(line)
    return failed
