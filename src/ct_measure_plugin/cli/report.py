"""`ct-measure report`: a page from saved records; nothing is measured again."""

from __future__ import annotations

from typing import TYPE_CHECKING

from ct_measure_plugin.cli import DONE

if TYPE_CHECKING:
    import argparse

__all__ = ["add_parser", "run"]


def add_parser(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the subcommand."""
    parser = commands.add_parser("report", help="write an HTML page from saved records")
    parser.add_argument("records", help="a JSON file that `ct-measure measure --save` wrote")
    parser.add_argument("page", help="the HTML file to write")
    parser.add_argument("--title", default="", help="the page's heading")
    parser.set_defaults(run=run)


def run(arguments: argparse.Namespace) -> int:
    """Write the page."""
    from ct_measure_plugin.records import read_json
    from ct_measure_plugin.report import write_report

    page = write_report(read_json(arguments.records), arguments.page, title=arguments.title)
    print(f"Report: {page}")
    return DONE
