"""`ct-measure measure … --subtract`: a repeat scan taken off, which leaves noise without object."""

from __future__ import annotations

from typing import TYPE_CHECKING

from ct_measure_plugin.cli.choosing import series_at

if TYPE_CHECKING:
    import argparse

    from ct_measure_plugin.physics.volume import Volume

__all__ = ["add_subtract_options", "without_repeat"]


def add_subtract_options(parser: argparse.ArgumentParser) -> None:
    """Add the options that name a repeat scan."""
    parser.add_argument(
        "--subtract",
        metavar="SERIES",
        help="a repeat scan on the same grid: measure the difference over √2, which is the noise"
        " of one scan without the object (with noise_power take --set detrend=mean)",
    )
    parser.add_argument("--subtract-index", metavar="N", help="which one, where that holds several")


def without_repeat(volume: Volume, arguments: argparse.Namespace) -> Volume:
    """Return the difference with the repeat scan that was named, or the volume if none was.

    Raises
    ------
    ArgumentError
        If the two are not on one grid, or the report of one series was asked for as well.
    """
    from ct_measure_plugin.errors import ArgumentError
    from ct_measure_plugin.physics import scan_difference

    if not arguments.subtract:
        return volume
    for name in ("dicom", "against"):
        if getattr(arguments, name):
            raise ArgumentError(
                name, "cannot be combined with --subtract", getattr(arguments, name)
            )
    return scan_difference(volume, series_at(arguments.subtract, arguments.subtract_index))
