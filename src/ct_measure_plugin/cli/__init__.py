"""The command `ct-measure`: one subcommand a file.

What belongs here: parsing arguments, calling the other rooms, printing, and the exit code. What it
may import: every room but the viewer, and heavy ones only when a command runs. What it must not
do: arithmetic, or showing a traceback for bad input.

Exit codes: 0 done, 1 a tolerance failed, 2 bad input, 3 not measurable.
"""

from __future__ import annotations

import argparse
import importlib
import sys
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Sequence

__all__ = ["BAD_INPUT", "DONE", "NOT_MEASURABLE", "TOLERANCE_FAILED", "main"]

DONE, TOLERANCE_FAILED, BAD_INPUT, NOT_MEASURABLE = 0, 1, 2, 3

_COMMANDS = (
    *("demo", "series", "targets", "measure", "materials", "convert", "report", "logbook"),
    "simulate",
)


def _parser() -> argparse.ArgumentParser:
    from ct_measure_plugin import __version__

    parser = argparse.ArgumentParser(
        prog="ct-measure",
        description="Measure CT series. Quality-control software, not a medical device.",
        epilog="Exit codes: 0 done, 1 a tolerance failed, 2 bad input, 3 not measurable.",
    )
    parser.add_argument("--version", action="version", version=f"ct-measure-plugin {__version__}")
    commands = parser.add_subparsers(metavar="COMMAND", required=True)
    for name in _COMMANDS:
        importlib.import_module(f"ct_measure_plugin.cli.{name}").add_parser(commands)
    return parser


def main(argv: Sequence[str] | None = None) -> int:
    """Run the command line; return its exit code.

    >>> main(["series", "no such folder"])
    2
    """
    from ct_measure_plugin.errors import CtMeasureError

    arguments = _parser().parse_args(argv)
    try:
        return int(arguments.run(arguments))
    except CtMeasureError as error:
        print(f"ct-measure: {error}", file=sys.stderr)
        return BAD_INPUT
    except BrokenPipeError:
        return DONE  # whoever read the output has seen enough
    except OSError as error:
        # the path is the user's own argument; the system's word for what is wrong is enough
        print(
            f"ct-measure: {error.strerror or 'a file cannot be read or written'}", file=sys.stderr
        )
        return BAD_INPUT
    except KeyboardInterrupt:
        print("ct-measure: stopped", file=sys.stderr)
        return BAD_INPUT
