"""`ct-measure measure … --dicom`: the numbers as a DICOM Structured Report beside the images."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import argparse
    from collections.abc import Sequence

    from ct_measure_plugin.dicom import MeasuredRegion, SeriesEntry
    from ct_measure_plugin.records import Record

__all__ = ["add_dicom_options", "write_dicom"]


def add_dicom_options(parser: argparse.ArgumentParser) -> None:
    """Add the options of the DICOM report."""
    parser.add_argument(
        "--dicom",
        metavar="FILE",
        help="write a DICOM Structured Report; it names the patient as the images do",
    )
    parser.add_argument(
        "--anonymous",
        action="store_true",
        help="leave patient and study empty in the DICOM report; its UIDs stay",
    )


def write_dicom(
    records: Sequence[Record], entry: SeriesEntry, arguments: argparse.Namespace
) -> None:
    """Write the records' numbers, a group for each region, for the series they were read on."""
    from ct_measure_plugin.dicom import write_structured_report

    measured = [_measured(record) for record in records]
    write_structured_report(arguments.dicom, entry, measured, anonymous=arguments.anonymous)


def _measured(record: Record) -> MeasuredRegion:
    from ct_measure_plugin.dicom import MeasuredRegion

    regions = record.typed_regions()
    # what took several regions together has no outline of its own
    region = regions[0] if len(regions) == 1 else None
    return MeasuredRegion(answer=record.answer(), measurement=record.measurement, region=region)
