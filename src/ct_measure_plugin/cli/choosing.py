"""Which series is meant: the only one at a place, or one by its number or key."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from ct_measure_plugin.dicom import SeriesEntry
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["entry_at", "must_exist", "series_at"]

#: A longer row of digits is a key, which is hexadecimal and has twelve.
LONGEST_NUMBER = 6


def series_at(place: str, index: str | None) -> Volume:
    """Read the series that :func:`entry_at` finds."""
    from ct_measure_plugin.dicom import read_series

    return read_series(entry_at(place, index))


def must_exist(place: str) -> None:
    """Raise NoSeriesError, which names the place, if nothing is there.

    The DICOM room leaves paths out of what it says, as they may name a patient; here the path is
    the user's own word of a moment ago.
    """
    from ct_measure_plugin.errors import NoSeriesError

    if not Path(place).exists():
        raise NoSeriesError(f"there is no folder or file {place!r}")


def entry_at(place: str, index: str | None) -> SeriesEntry:
    """Return the series at a place; of several, the one with a number or key.

    Raises
    ------
    SeriesError
        If there is no such place, no series, or several and no valid number or key.
    """
    from ct_measure_plugin.dicom import read_series, scan_folder
    from ct_measure_plugin.errors import SeriesChoiceError

    must_exist(place)
    entries = scan_folder(place).entries
    if not entries:
        read_series(place)  # which says what was passed over
    where = "`ct-measure series` lists them with their numbers"
    if index is None:
        if len(entries) > 1:
            raise SeriesChoiceError(
                f"there are {len(entries)} series; choose one by --index N ({where})"
            )
        return entries[0]
    if index.isdecimal() and len(index) <= LONGEST_NUMBER:
        if int(index) >= len(entries):
            raise SeriesChoiceError(f"there are {len(entries)} series; --index counts from 0")
        return entries[int(index)]
    for entry in entries:
        if index in (entry.key, entry.digest):
            return entry
    raise SeriesChoiceError(f"no series has that number or key; {where}")
