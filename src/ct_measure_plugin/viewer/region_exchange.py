"""Regions and labels out to files and back: our own region file, DICOM segmentation and report."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.dicom import (
    Code,
    LabelClass,
    MeasuredRegion,
    SeriesEntry,
    read_segmentation,
    write_segmentation,
    write_structured_report,
)
from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.regions import Mask, Region
from ct_measure_plugin.records import read_regions, write_regions
from ct_measure_plugin.viewer.label_grid import NoGrid, grid_of
from ct_measure_plugin.viewer.layers import own_volume
from ct_measure_plugin.viewer.loading import entries_at
from ct_measure_plugin.viewer.region_drawing import new_labels_layer, row_of, voxels_of
from ct_measure_plugin.viewer.region_features import CLASS, CODE, NAME, set_column, tags_on
from ct_measure_plugin.viewer.tasks import run_here

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.viewer.placement import Placement
    from ct_measure_plugin.viewer.region_acts import RegionActs
    from ct_measure_plugin.viewer.region_board import RegionBoard

__all__ = [
    "classes_of",
    "entry_of",
    "open_regions",
    "open_segmentation",
    "save_regions",
    "save_report",
    "save_segmentation",
]

#: The only measurement whose answers these regions have.
_MEASUREMENT = "region_statistics"


# --- our own region file --------------------------------------------------------------


def save_regions(board: RegionBoard, path: str | Path) -> Path:
    """Write the regions of a board as they lie on its first image."""
    placement = board.placement()
    regions = [one.region for one in board.drawn if one.region is not None]
    if placement is None or not regions:
        raise ArgumentError("regions", "must hold at least one", len(regions))
    return write_regions(regions, path, volume=placement.volume, title=_title(board))


def _title(board: RegionBoard) -> str:
    return "" if board.source is None else str(board.source.layer.name)


def open_regions(
    acts: RegionActs, board: RegionBoard, viewer: Any, path: str | Path
) -> tuple[int, str]:
    """Draw the regions of a file on a board's layer; masks go to a new Labels layer.

    Returns
    -------
    (int, str)
        How many there are, and what a reader must know about where they lie; "" if nothing.
    """
    placement = board.placement()
    if placement is None:
        raise ArgumentError("image", "must be chosen first", None)
    found = read_regions(path)
    remark = found.frame.problem(placement.volume)
    digest = placement.volume.source.series_digest
    if not remark and found.frame.series_digest not in ("", digest):
        remark = "the regions were drawn on another series; check that they lie where they should"
    masks = [one for one in found.regions if isinstance(one, Mask)]
    drawn = [one for one in found.regions if not isinstance(one, Mask)]
    if drawn:
        acts.add(drawn, f"open {len(drawn)} regions")
    if masks:
        _paint(masks, placement, viewer, found.title or Path(path).stem)
    return len(found.regions), remark


def _paint(masks: Sequence[Region], placement: Placement, viewer: Any, name: str) -> Any:
    """Add a Labels layer with masks as labels, numbered from 1."""
    layer = new_labels_layer(viewer, placement.layer, name)
    for number, mask in enumerate(masks, start=1):
        layer.data[voxels_of(mask, layer, placement, viewer.dims.point)] = number
    rows = {number: row_of(mask) for number, mask in enumerate(masks, start=1)}
    for column in (NAME, CLASS, CODE):
        set_column(layer, column, {n: row[column] for n, row in rows.items()}, keys=list(rows))
    layer.refresh()
    return layer


# --- DICOM ----------------------------------------------------------------------------


def entry_of(image: Any) -> SeriesEntry:
    """Return the series that an image layer was opened from.

    Raises
    ------
    ArgumentError
        If it was opened from elsewhere, or its files are gone or changed.
    """
    volume, path = own_volume(image), image.source.path
    if volume is None or not path:
        rule = "must have been opened from a folder with its DICOM series"
        raise ArgumentError("image", rule, image.name)
    digest, title = volume.source.series_digest, volume.source.title
    entries = [one for one in entries_at([Path(path)]) if one.digest == digest]
    named = [one for one in entries if one.key in title] or entries
    for entry in named:
        if (entry.slice_count, *entry.matrix) == volume.shape:
            return entry
    raise ArgumentError("image", "must still be there as it was opened", image.name)


def classes_of(layer: Any, labels: Sequence[int]) -> dict[int, LabelClass]:
    """Return what a Labels layer's features say of its labels, in DICOM's terms."""
    found = {}
    for label, tags in zip(labels, tags_on(layer, labels), strict=True):
        name = tags.name or tags.group or f"Label {label}"
        kind = Code.of(tags.code, tags.group or name) if tags.code else None
        found[label] = LabelClass(name, kind)
    return found


def save_segmentation(
    layer: Any, placement: Placement, point: Sequence[float], path: str | Path, *, anonymous: bool
) -> Path:
    """Write a Labels layer as a DICOM segmentation of the series that an image shows."""
    entry = entry_of(placement.layer)
    labels = _on_grid(layer, placement, point)
    numbers = [int(n) for n in np.unique(labels) if n]
    classes = classes_of(layer, numbers)
    return run_here(
        lambda _work: write_segmentation(path, entry, labels, classes, anonymous=anonymous),
        "Writing the segmentation",
    )


def _on_grid(layer: Any, placement: Placement, point: Sequence[float]) -> NDArray[Any]:
    """Return a Labels layer's map if it has just the image's voxels."""
    grid, volume = grid_of(layer, placement, point), placement.volume
    rule = "must have the image's own voxels"
    if isinstance(grid, NoGrid) or grid.shape != volume.shape:
        raise ArgumentError("labels", rule, layer.name)
    step = np.asarray(volume.spacing_mm)
    apart = np.abs(np.asarray(grid.origin_mm) - np.asarray(volume.origin_mm)) / step
    scale = np.abs(np.asarray(grid.spacing_mm) / step - 1)
    if bool(np.any(apart > 0.1)) or bool(np.any(scale > 1e-3)):
        raise ArgumentError("labels", rule, layer.name)
    return np.asarray(grid.data_of(layer))


def open_segmentation(path: str | Path, placement: Placement, viewer: Any) -> tuple[Any, str]:
    """Add a Labels layer with a DICOM segmentation, and say what a reader must know about it."""
    volume = placement.volume
    found = run_here(lambda _work: read_segmentation(path, volume), "Reading the segmentation")
    layer = new_labels_layer(viewer, placement.layer, "Segmentation")
    layer.data = found.labels
    keys = list(found.classes)
    for column, values in (
        (NAME, {n: one.name for n, one in found.classes.items()}),
        (CLASS, {n: one.kind.meaning if one.kind else "" for n, one in found.classes.items()}),
        (CODE, {n: _code(one.kind) for n, one in found.classes.items()}),
    ):
        set_column(layer, column, values, keys=keys)
    return layer, " ".join(str(caution) for caution in found.cautions)


def _code(kind: Code | None) -> str:
    return "" if kind is None else f"{kind.scheme}:{kind.value}"


def save_report(board: RegionBoard, path: str | Path, *, anonymous: bool) -> Path:
    """Write what a board shows of its first image as a DICOM structured report."""
    placement = board.placement()
    if placement is None:
        raise ArgumentError("image", "must be chosen first", None)
    entry = entry_of(placement.layer)
    measured = [
        MeasuredRegion(answer=answer, measurement=_MEASUREMENT, region=one.region)
        for one in board.drawn
        if one.region is not None and (answer := board.answer(one.index)) is not None
    ]
    return run_here(
        lambda _work: write_structured_report(path, entry, measured, anonymous=anonymous),
        "Writing the report",
    )
