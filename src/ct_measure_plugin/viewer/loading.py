"""From a path to layers: find the series, let someone choose, read it with progress and cancel."""

from __future__ import annotations

import time
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.dicom import read_series, scan_folder
from ct_measure_plugin.errors import ArgumentError, NoSeriesError
from ct_measure_plugin.viewer.layers import layer_of, own_volume
from ct_measure_plugin.viewer.tasks import run_here

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    from ct_measure_plugin.dicom import SeriesEntry, SeriesScan
    from ct_measure_plugin.physics.volume import Volume
    from ct_measure_plugin.viewer.layers import LayerTuple
    from ct_measure_plugin.viewer.tasks import Work

__all__ = ["MOST_AT_ONCE", "entries_at", "is_open", "layers_of", "name_of", "one_slice"]

#: Series opened at once when nobody is there to choose; the rest are named in a warning.
MOST_AT_ONCE = 8

#: File systems stamp files by a coarse clock, up to some ten milliseconds late.
_COARSE_NS = 50_000_000


@dataclass(slots=True)
class _Seen:
    """The series around the last files opened, while their folders have not changed."""

    folder: Path | None = None
    changed_ns: int = 0
    scanned_ns: int = 0
    entries: tuple[SeriesEntry, ...] = ()


_seen = _Seen()


def entries_at(paths: Sequence[Path]) -> tuple[SeriesEntry, ...]:
    """Return the CT series under folders, or that files belong to, each once.

    Raises
    ------
    NoSeriesError
        If there are none; the text counts the reasons.
    Cancelled
        If someone pressed cancel.
    """
    found: dict[str, SeriesEntry] = {}
    passed_over: dict[str, int] = {}
    for path in paths:
        if any(entry.holds(path) for entry in found.values()):
            continue
        for entry in _known_around(path) or _scan(path, passed_over):
            found[entry.key] = entry
    if not found:
        raise NoSeriesError(_nothing(passed_over))
    return tuple(found.values())


def _known_around(path: Path) -> tuple[SeriesEntry, ...]:
    """Return a file's series if a file beside it was opened just before."""
    if path.is_dir() or path.parent != _seen.folder or _changed(path.parent) != _seen.changed_ns:
        return ()
    if _changed(path) > _seen.scanned_ns:  # written over since, which its folder does not show
        return ()
    return tuple(entry for entry in _seen.entries if entry.holds(path))


def _scan(path: Path, passed_over: dict[str, int]) -> tuple[SeriesEntry, ...]:
    def job(work: Work) -> SeriesScan:
        return scan_folder(path, progress=work.progress, cancel=work.cancelled)

    began = time.time_ns() - _COARSE_NS
    scan = run_here(job, "Looking for CT series")
    for reason, count in scan.reasons().items():
        passed_over[reason] = passed_over.get(reason, 0) + count
    if not path.is_dir():
        folder, changed = path.parent, _changed(path.parent)
        same = (folder, changed) == (_seen.folder, _seen.changed_ns)
        kept = _seen.entries if same else ()
        _seen.scanned_ns = min(began, _seen.scanned_ns) if same else began
        _seen.folder, _seen.changed_ns = folder, changed
        _seen.entries = (*kept, *scan.entries)
    return scan.entries


def _changed(path: Path) -> int:
    try:
        return path.stat().st_mtime_ns
    except OSError:
        return -1


def _nothing(passed_over: dict[str, int]) -> str:
    if not passed_over:
        return "there is no CT series here: there are no files"
    most = sorted(passed_over.items(), key=lambda item: -item[1])[:5]
    told = "; ".join(f"{count} × {reason}" for reason, count in most)
    return f"there is no CT series here; files passed over: {told}"


def name_of(entry: SeriesEntry) -> str:
    """Return a layer's name for a series: number, kernel, thickness; no free text of the header.

    Layer names find their way into tables and file names, so nothing that might name a person is
    in them.
    """
    part = f" part {entry.part}" if entry.parts > 1 else ""
    parts = [f"CT {entry.series_number}{part}"]
    if entry.kernel:
        parts.append(entry.kernel)
    if entry.thickness_mm is not None:
        parts.append(f"{entry.thickness_mm[1]:g} mm")
    return ", ".join(parts)


def is_open(entry: SeriesEntry, layers: Iterable[Any]) -> bool:
    """Tell whether a series is shown by one of the layers already."""
    volumes = (own_volume(layer) for layer in layers)
    return any(
        volume is not None
        and volume.source.series_digest == entry.digest
        and entry.key in volume.source.title
        for volume in volumes
    )


def layers_of(
    entries: Sequence[SeriesEntry], *, only: Path | None = None, names: Sequence[str] = ()
) -> list[LayerTuple]:
    """Read series and return their layers.

    Parameters
    ----------
    entries : sequence of SeriesEntry
        What to read.
    only : Path, optional
        Keep only the slices that come from this file.
    names : sequence of str, optional
        The layers' names; by default :func:`name_of`.

    Raises
    ------
    SeriesError
        If one cannot be read.
    Cancelled
        If someone pressed cancel; nothing is kept.
    """
    layers = []
    for index, entry in enumerate(entries):
        volume = _read(entry, f"Reading series {index + 1} of {len(entries)}", only)
        name = names[index] if index < len(names) else name_of(entry)
        layers.append(layer_of(volume, name))
    return layers


def _read(entry: SeriesEntry, title: str, only: Path | None) -> Volume:
    wanted: tuple[int, ...] = () if only is None else entry.places_of(only)

    def job(work: Work) -> Volume:
        lazy = True if wanted else None
        volume = read_series(entry, lazy=lazy, progress=work.progress, cancel=work.cancelled)
        return one_slice(volume, wanted[0]) if len(wanted) == 1 else volume

    return run_here(job, title)


def one_slice(volume: Volume, index: int) -> Volume:
    """Return a Volume of one slice of another, in the same place.

    Raises
    ------
    ArgumentError
        If there is no such slice.
    """
    if not 0 <= index < volume.shape[0]:
        raise ArgumentError("index", f"must be 0 to {volume.shape[0] - 1}", index)
    one = slice(index, index + 1)
    z = float(volume.positions_mm[index])
    affine = volume.affine_lps
    if affine is not None:
        affine = affine.copy()
        steps = (z - float(volume.positions_mm[0])) / volume.spacing_mm[0]
        affine[:3, 3] += steps * affine[:3, 0]
    return replace(
        volume,
        hu=np.asarray(volume.hu[one]),
        origin_mm=(z, *volume.origin_mm[1:]),
        slice_positions_mm=np.array([z]),
        affine_lps=affine,
        padding_hu=None if volume.padding_hu is None else volume.padding_hu[one],
        acquisition=volume.acquisition[one],
    )
