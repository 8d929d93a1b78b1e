"""`ct-measure targets`: what a slice offers for measuring an MTF, as regions in words."""

from __future__ import annotations

import json
import sys
from typing import TYPE_CHECKING, Any

from ct_measure_plugin.cli import DONE, NOT_MEASURABLE
from ct_measure_plugin.cli.choosing import series_at
from ct_measure_plugin.cli.words_of_regions import words_of

if TYPE_CHECKING:
    import argparse

    from ct_measure_plugin.physics.targets import Target, TargetsFound, Unsuitable

__all__ = ["add_parser", "run"]


def add_parser(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the subcommand."""
    parser = commands.add_parser(
        "targets", help="find edges, rods and wires that would measure an MTF well"
    )
    parser.add_argument("series", help="a folder, a DICOMDIR, or one file of the series")
    parser.add_argument(
        "--index",
        metavar="N",
        help="which series: its number in the list of `ct-measure series`, or its key",
    )
    parser.add_argument(
        "--slice", type=int, required=True, metavar="K", help="which slice, counted from 0"
    )
    parser.add_argument(
        "--most", type=int, default=12, metavar="N", help="so many candidates are tried (12)"
    )
    parser.add_argument("--json", action="store_true", help="print JSON")
    parser.set_defaults(run=run)


def run(arguments: argparse.Namespace) -> int:
    """Find the targets of one slice and print them."""
    from ct_measure_plugin.measurements.targets import targets_on

    volume = series_at(arguments.series, arguments.index)
    found = targets_on(volume, arguments.slice, most=arguments.most)
    if arguments.json:
        print(json.dumps(_as_data(found), indent=1, ensure_ascii=False))
    else:
        _print(found)
    if found.targets:
        return DONE
    print("ct-measure: nothing on this slice would measure an MTF well", file=sys.stderr)
    return NOT_MEASURABLE


def _print(found: TargetsFound) -> None:
    for target in found.targets:
        print(f"{target.region.name}: {', '.join(_facts(target))}")
        for caution in target.cautions:
            print(f"  {caution.kind.level}: {caution}")
        print(f'  {target.measurement} --region "{words_of(target.region)}"')
    if found.others:
        print("Not proposed:")
    for other in found.others:
        y, x = other.center_mm
        print(f"  {other.kind} at {y:.1f},{x:.1f}: {other.why.reason}; {other.why.remedy}")


def _facts(target: Target) -> list[str]:
    facts = [f"f50 {target.f50}", f"contrast {target.contrast}"]
    if target.contrast_to_noise:
        facts.append(f"contrast to noise {target.contrast_to_noise}")
    if target.angle is not None:
        facts.append(f"leans {target.angle}")
    if target.radius is not None:
        facts.append(f"radius {target.radius}")
    return facts


def _as_data(found: TargetsFound) -> dict[str, Any]:
    return {
        "targets": [_target(one) for one in found.targets],
        "others": [_other(one) for one in found.others],
        "cautions": [caution.text for caution in found.cautions],
    }


def _target(one: Target) -> dict[str, Any]:
    from ct_measure_plugin.physics.results import Quantity
    from ct_measure_plugin.records import region_to_dict

    numbers = {
        name: getattr(one, name)
        for name in ("f50", "f10", "contrast", "contrast_to_noise", "angle", "radius", "width")
    }
    return {
        "kind": one.kind,
        "measurement": one.measurement,
        "region": region_to_dict(one.region),
        "words": words_of(one.region),
        **{
            name: {"value": number.value, "unit": number.unit, "uncertainty": number.uncertainty}
            for name, number in numbers.items()
            if isinstance(number, Quantity)
        },
        "cautions": [{"code": caution.code, "text": caution.text} for caution in one.cautions],
    }


def _other(one: Unsuitable) -> dict[str, Any]:
    return {
        "kind": one.kind,
        "center_mm": list(one.center_mm),
        "size_mm": one.size_mm,
        "reason": one.why.reason,
        "remedy": one.why.remedy,
    }
