"""`ct-measure measure`: measure regions of a series, or everything in a plan."""

from __future__ import annotations

from typing import TYPE_CHECKING

from ct_measure_plugin.cli.against import add_against_options, measure_against
from ct_measure_plugin.cli.choosing import entry_at
from ct_measure_plugin.cli.dicom_report import add_dicom_options, write_dicom
from ct_measure_plugin.cli.outputs import add_logbook_option, add_output_options, deliver
from ct_measure_plugin.cli.region_words import HELP, region_from_words
from ct_measure_plugin.cli.setting_words import SETTING_HELP, ListMeasurements, setting_from_words
from ct_measure_plugin.cli.subtract import add_subtract_options, without_repeat
from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    import argparse

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume
    from ct_measure_plugin.records import Plan

__all__ = ["add_parser", "run"]


def add_parser(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the subcommand."""
    parser = commands.add_parser("measure", help="measure regions of a series")
    parser.add_argument("series", help="a folder, a DICOMDIR, or one file of the series")
    parser.add_argument("measurement", nargs="?", help="its name, for example region_statistics")
    parser.add_argument(
        "--index",
        metavar="N",
        help="which series: its number in the list of `ct-measure series`, or its key",
    )
    parser.add_argument("--region", action="append", default=[], metavar="WORDS", help=HELP)
    parser.add_argument(
        "--regions", action="append", default=[], metavar="FILE", help="a file of regions"
    )
    parser.add_argument(
        "--labels",
        action="append",
        default=[],
        metavar="FILE",
        help="a label map: .npy, .npz, .tif or a DICOM Segmentation",
    )
    parser.add_argument(
        "--set", action="append", default=[], metavar="NAME=VALUE", help=SETTING_HELP
    )
    parser.add_argument(
        "--measurements",
        action=ListMeasurements,
        help="list every measurement with its settings, and stop",
    )
    parser.add_argument("--plan", metavar="FILE", help="a YAML or JSON plan instead of the above")
    add_against_options(parser)
    add_subtract_options(parser)
    add_output_options(parser)
    add_logbook_option(parser)
    add_dicom_options(parser)
    parser.set_defaults(run=run)


def run(arguments: argparse.Namespace) -> int:
    """Measure."""
    from ct_measure_plugin.dicom import read_series
    from ct_measure_plugin.records import load_plan
    from ct_measure_plugin.run import run_plan

    if bool(arguments.plan) == bool(arguments.measurement):
        raise ArgumentError("measurement", "must be given, or else --plan", arguments.measurement)
    plan = load_plan(arguments.plan) if arguments.plan else None
    entry = entry_at(arguments.series, arguments.index)
    volume = without_repeat(read_series(entry), arguments)
    plan = plan or _plan(arguments, volume)
    if arguments.against:
        if arguments.dicom:
            raise ArgumentError("dicom", "cannot be combined with --against", arguments.dicom)
        return measure_against(plan, volume, arguments)
    records = run_plan(plan, volume)
    if arguments.dicom:
        write_dicom(records, entry, arguments)
    return deliver(records, arguments, plan)


def _plan(arguments: argparse.Namespace, volume: Volume) -> Plan:
    from ct_measure_plugin.measurements.catalogue import find, settings_for
    from ct_measure_plugin.records import Plan, PlanStep, read_labels, region_to_dict

    asked = find(arguments.measurement)
    given = dict(setting_from_words(words, asked.settings_type) for words in arguments.set)
    settings = settings_for(arguments.measurement, given)
    regions = [region_from_words(words, volume) for words in arguments.region]
    for file in arguments.regions:
        regions += _regions_of(file, volume)
    regions += [read_labels(file, volume) for file in arguments.labels]
    if not regions and asked.regions.at_least:
        raise ArgumentError(
            "region",
            f"must be given for {asked.name} ({' or '.join(asked.regions.kinds)}), in words, or a "
            "file by --regions or --labels",
            "none",
        )
    step = PlanStep(
        measurement=arguments.measurement,
        settings=settings.model_dump(mode="json"),
        regions=tuple(region_to_dict(region) for region in regions),
    )
    return Plan(steps=(step,))


def _regions_of(file: str, volume: Volume) -> list[Region]:
    from ct_measure_plugin.errors import RegionFileError
    from ct_measure_plugin.records import read_regions

    kept = read_regions(file)
    if problem := kept.frame.problem(volume):
        raise RegionFileError({"frame": problem})
    return list(kept.regions)
