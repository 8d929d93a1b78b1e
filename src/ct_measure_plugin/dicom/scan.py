"""From a folder, a DICOMDIR or a file to the CT series in it."""

from __future__ import annotations

import os
import stat
from collections import Counter, defaultdict
from pathlib import Path
from typing import TYPE_CHECKING, Final

from ct_measure_plugin.dicom import tags
from ct_measure_plugin.dicom.asking import stop_if_asked
from ct_measure_plugin.dicom.elements import Elements
from ct_measure_plugin.dicom.entries import SeriesEntry, SeriesScan, SkippedFile, entry_of
from ct_measure_plugin.dicom.facts import ImageFacts, images_of
from ct_measure_plugin.dicom.grouping import stacks_of
from ct_measure_plugin.dicom.header import UnreadableFileError, read_header
from ct_measure_plugin.errors import SeriesError

if TYPE_CHECKING:
    from collections.abc import Iterable

    from ct_measure_plugin.dicom.asking import Cancel, Progress

__all__ = ["scan_folder", "scan_series"]

_DIRECTORY_CLASS: Final = "1.2.840.10008.1.3.10"
_CHECK_EVERY: Final = 16


def scan_series(
    folder: str | os.PathLike[str],
    *,
    progress: Progress | None = None,
    cancel: Cancel | None = None,
) -> tuple[SeriesEntry, ...]:
    """Return every CT series under a folder, in a DICOMDIR, or the one a file belongs to.

    Files that are no CT slice are passed over; :func:`scan_folder` says which and why.

    Parameters
    ----------
    folder : path
        A folder, walked with all its subfolders; a DICOMDIR, whose files are looked at; or any
        other file, which stands for the series it belongs to, in its own folder.
    progress : callable(done, total), optional
        Called as files are read.
    cancel : callable() -> bool or threading.Event, optional
        Asked now and then; True, or a set event, stops the scan.

    Raises
    ------
    SeriesError
        If there is no such folder or file.
    Cancelled
        If `cancel` said so.

    Examples
    --------
    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     scan_series(folder)
    ()
    """
    return scan_folder(folder, progress=progress, cancel=cancel).entries


def scan_folder(
    folder: str | os.PathLike[str],
    *,
    progress: Progress | None = None,
    cancel: Cancel | None = None,
) -> SeriesScan:
    """Return the CT series under a folder and every file that is in none, with the reason.

    Parameters and errors are those of :func:`scan_series`.
    """
    place = Path(folder)
    if place.is_dir():
        return _scan(_files_under(place), progress, cancel)
    if not place.is_file():
        raise SeriesError("there is no such folder or file")
    listed = _listed_in(place)
    if listed is not None:
        return _scan(listed, progress, cancel)
    return _scan_around(place, progress, cancel)


def _scan_around(file: Path, progress: Progress | None, cancel: Cancel | None) -> SeriesScan:
    """Return the series that a file belongs to; an unusable file is the only one skipped."""
    images, skipped = _images_in([str(file)], None, None)
    if not images:
        return SeriesScan((), tuple(item for item, _ in skipped))
    neighbours = sorted(str(path) for path in file.parent.iterdir() if path.is_file())
    scan = _scan(neighbours, progress, cancel)
    kept = tuple(entry for entry in scan.entries if _holds(entry, file))
    return SeriesScan(kept, scan.skipped)


def _holds(entry: SeriesEntry, file: Path) -> bool:
    return any(image.path == str(file) for image in entry._stack.images)


def _is_regular(path: str) -> bool:
    """Return True for a plain file; opening a pipe or a device could wait for ever."""
    try:
        return stat.S_ISREG(os.stat(path).st_mode)
    except OSError:
        return False


def _files_under(folder: Path) -> list[str]:
    """Return all files under a folder; links to folders are not followed, they may run round."""
    return sorted(
        os.path.join(where, name) for where, _, names in os.walk(folder) for name in names
    )


def _listed_in(file: Path) -> list[str] | None:
    """Return the files a DICOMDIR lists, None if the file is no DICOMDIR.

    Its names are text from outside: they are looked for below its own folder and nowhere else.
    """
    try:
        elements = read_header(file).elements
    except (UnreadableFileError, OSError):
        return None
    if tags.DIRECTORY_RECORDS not in elements.items:
        return None
    root = file.parent
    named = (_referenced(record, root) for record in elements.items[tags.DIRECTORY_RECORDS])
    return sorted({str(path) for path in named if path is not None})


def _referenced(record: Elements, root: Path) -> Path | None:
    steps = [step.strip() for step in record.text(tags.REFERENCED_FILE).split("\\")]
    if not steps or not all(steps) or any(_climbs(step) for step in steps):
        return None
    path = root.joinpath(*steps)
    if not path.exists():  # media written on systems without capitals
        lowered = root.joinpath(*(step.lower() for step in steps))
        path = lowered if lowered.exists() else path
    return path


def _climbs(step: str) -> bool:
    return step in (".", "..") or any(mark in step for mark in "/\\:\0")


def _scan(files: list[str], progress: Progress | None, cancel: Cancel | None) -> SeriesScan:
    images, skipped = _images_in(files, progress, cancel)
    damaged = Counter(digest for item, digest in skipped if item.damaged and digest)
    by_series: dict[str, list[ImageFacts]] = defaultdict(list)
    for image in images:
        by_series[image.series_uid].append(image)
    entries = []
    for group in by_series.values():
        stacks = stacks_of(group)
        for number, stack in enumerate(stacks, start=1):
            entry = entry_of(stack, number, len(stacks))
            if damaged.get(entry.digest):
                entry = entry_of(stack, number, len(stacks), unreadable=damaged[entry.digest])
            entries.append(entry)
    entries.sort(key=lambda entry: (entry.series_number, entry.digest, entry.part))
    return SeriesScan(tuple(entries), tuple(item for item, _ in skipped))


def _images_in(
    files: Iterable[str], progress: Progress | None, cancel: Cancel | None
) -> tuple[list[ImageFacts], list[tuple[SkippedFile, str]]]:
    """Return the images of some files, and the skipped files with their series' digests."""
    paths = list(files)
    images: list[ImageFacts] = []
    skipped: list[tuple[SkippedFile, str]] = []
    for done, path in enumerate(paths):
        if done % _CHECK_EVERY == 0:
            stop_if_asked(cancel)
            if progress is not None:
                progress(done, len(paths))
        try:
            images += _images_of_file(path)
        except UnreadableFileError as problem:
            item = SkippedFile(Path(path), problem.reason, damaged=not problem.stray)
            skipped.append((item, problem.series_digest))
        except OSError as problem:
            reason = os.strerror(problem.errno).lower() if problem.errno else "cannot be opened"
            skipped.append((SkippedFile(Path(path), f"cannot be opened: {reason}"), ""))
    if progress is not None:
        progress(len(paths), len(paths))
    return images, skipped


def _images_of_file(path: str) -> list[ImageFacts]:
    if not _is_regular(path):
        raise UnreadableFileError("not a plain file, or it is gone", stray=True)
    header = read_header(path)
    if tags.DIRECTORY_RECORDS in header.elements.items:
        raise UnreadableFileError("a directory of other files", stray=True)
    return images_of(header, path)
