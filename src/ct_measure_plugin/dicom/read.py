"""From a series to a Volume."""

from __future__ import annotations

import os
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from ct_measure_plugin.dicom.encapsulated import require_decoder
from ct_measure_plugin.dicom.entries import SeriesEntry, SeriesScan
from ct_measure_plugin.dicom.header_cautions import lossy_caution
from ct_measure_plugin.dicom.lazy import lazy_array
from ct_measure_plugin.dicom.loading import Loaded, load_all
from ct_measure_plugin.dicom.padding import PaddingFound, padding_cautions, padding_unseen
from ct_measure_plugin.dicom.plausibility import implausible, observed_limits, sample_of
from ct_measure_plugin.dicom.rescale import representable_of
from ct_measure_plugin.dicom.scan import scan_folder
from ct_measure_plugin.dicom.texts import digest_of
from ct_measure_plugin.errors import NoSeriesError, SeriesChoiceError
from ct_measure_plugin.physics.volume import Source, Volume

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.dicom.asking import Cancel, Progress
    from ct_measure_plugin.dicom.facts import ImageFacts
    from ct_measure_plugin.physics.results import Caution

__all__ = ["read_series", "volume_of"]

_SAMPLED_SLICES: Final = 5


def read_series(
    folder_or_entry: str | os.PathLike[str] | SeriesEntry,
    series_uid: str | None = None,
    *,
    lazy: bool | None = None,
    progress: Progress | None = None,
    cancel: Cancel | None = None,
) -> Volume:
    """Read a CT series into a Volume.

    Parameters
    ----------
    folder_or_entry : path or SeriesEntry
        A folder, a DICOMDIR, a file of the series, or an entry of :func:`scan_series`.
    series_uid : str, optional
        Which series, if there are several: its UID, or an entry's `digest` or `key`.
    lazy : bool, optional
        True gives a dask array of one chunk a slice, False an array in memory; by default a
        series larger than half of the machine's memory is lazy.
    progress : callable(done, total), optional
        Called with files while headers are read, then with slices.
    cancel : callable() -> bool or threading.Event, optional
        Asked now and then; True, or a set event, stops the work.

    Returns
    -------
    Volume
        Slices ordered along the normal n = X × Y; frame and affine as in its docstring.

    Raises
    ------
    NoSeriesError
        If there is no such CT series.
    SeriesChoiceError
        If there are several and none was chosen; the text lists them.
    DecoderMissingError
        If a package is missing; the text names the pip command.
    SeriesError
        If a slice is damaged.
    Cancelled
        If `cancel` said so.
    """
    if isinstance(folder_or_entry, SeriesEntry):
        entry = folder_or_entry
    else:
        scan = scan_folder(folder_or_entry, progress=progress, cancel=cancel)
        entry = _chosen(scan, series_uid)
    images = entry._stack.images
    for syntax_uid in {image.syntax_uid for image in images}:
        require_decoder(syntax_uid)
    if lazy is None:
        rows, columns = entry.matrix
        lazy = 2 * entry.slice_count * rows * columns > _memory_limit()
    if lazy:
        return _lazy_volume(entry)
    loaded = load_all(images, hounsfield=entry.unit == "HU", progress=progress, cancel=cancel)
    return _loaded_volume(entry, loaded)


def _memory_limit() -> int:
    """Return half of the machine's memory in bytes, 4 GB where it does not say."""
    try:
        return os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE") // 2
    except (AttributeError, OSError, ValueError):
        return 1 << 32


def _chosen(scan: SeriesScan, series_uid: str | None) -> SeriesEntry:
    entries = scan.entries
    if not entries:
        raise NoSeriesError(_nothing(scan))
    if series_uid is not None:
        wanted = (series_uid, digest_of(series_uid))
        entries = tuple(e for e in entries if e.digest in wanted or e.key == series_uid)
        if not entries:
            raise NoSeriesError(f"no such series; there are: {_listed(scan.entries)}")
    if len(entries) > 1:
        raise SeriesChoiceError(f"there are several series; choose one: {_listed(entries)}")
    return entries[0]


def _nothing(scan: SeriesScan) -> str:
    reasons = scan.reasons()
    if not reasons:
        return "there is no CT series: there are no files"
    told = "; ".join(f"{count} × {reason}" for reason, count in list(reasons.items())[:5])
    return f"there is no CT series; files passed over: {told}"


def _listed(entries: Sequence[SeriesEntry]) -> str:
    shown = "; ".join(f"{entry.key} ({entry.label})" for entry in entries[:20])
    return shown + (f"; and {len(entries) - 20} more" if len(entries) > 20 else "")


def _loaded_volume(entry: SeriesEntry, loaded: Loaded) -> Volume:
    images = entry._stack.images
    cautions = list(entry.cautions)
    cautions += padding_cautions(loaded.padding, images, entry.unit)
    if loaded.inexact and not any(one.code == "lossy-compression" for one in cautions):
        cautions.append(lossy_caution(loaded.inexact, len(images)))
    limits = representable_of(images)
    if entry.unit == "HU":
        chosen = np.unique(np.linspace(0, len(images) - 1, _SAMPLED_SLICES).astype(int))
        sample = sample_of([(loaded.values[k], loaded.padding[k]) for k in chosen])
        doubt = implausible(sample)
        cautions += [doubt] if doubt else []
        limits = observed_limits(sample, limits)
    return volume_of(entry, loaded.values, loaded.padding, cautions, limits)


def _lazy_volume(entry: SeriesEntry) -> Volume:
    images = entry._stack.images
    hounsfield = entry.unit == "HU"
    padding = [padding_unseen(image, hounsfield=hounsfield) for image in images]
    cautions = [*entry.cautions, *padding_cautions(padding, images, entry.unit)]
    return volume_of(entry, lazy_array(images), padding, cautions, representable_of(images))


def volume_of(
    entry: SeriesEntry,
    values: Any,
    padding: Sequence[PaddingFound],
    cautions: Sequence[Caution],
    limits: tuple[float, float] | None,
) -> Volume:
    """Return a Volume of values in the series' geometry, with what its headers tell."""
    geometry = entry._geometry
    images = entry._stack.images
    return Volume(
        values,
        spacing_mm=entry.spacing_mm,
        origin_mm=geometry.origin_mm if geometry else (0.0, 0.0, 0.0),
        slice_positions_mm=geometry.z_mm if geometry else None,
        affine_lps=geometry.affine_lps if geometry else None,
        direction_lps=geometry.direction_lps if geometry else None,
        tilt_deg=entry.tilt_deg,
        unit=entry.unit,
        padding_hu=_padding_table(padding),
        representable_hu=limits,
        acquisition=tuple(image.acquisition for image in images),
        cautions=tuple(cautions),
        source=_source(entry, images),
        windows=entry.windows,
        patient_position=entry.patient_position,
    )


def _source(entry: SeriesEntry, images: Sequence[ImageFacts]) -> Source:
    by_position = entry._geometry is not None and not images[0].spacing_from_diameter
    return Source(
        title=f"CT series {entry.key}",
        series_digest=entry.digest,
        spacing_source="DICOM positions" if by_position else "DICOM header without positions",
    )


def _padding_table(padding: Sequence[PaddingFound]) -> NDArray[np.float64] | None:
    table = np.array([(one.low, one.high) for one in padding], dtype=float)
    return None if bool(np.all(np.isnan(table))) else table
