"""Measure one volume, and keep what was asked and found as records."""

from __future__ import annotations

import hashlib
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import Cancelled
from ct_measure_plugin.measurements import expanded, find, measure_each
from ct_measure_plugin.records import Record
from ct_measure_plugin.run.preview import preview_of

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from ct_measure_plugin.measurements import Settings
    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume
    from ct_measure_plugin.records import Plan

__all__ = ["content_digest", "replay", "run_measurement", "run_plan"]


def content_digest(volume: Volume) -> str:
    """Return a SHA-256 over shape, spacing, positions and values, slice by slice.

    The same pixels in another integer type or byte order have the same digest.
    """
    digest = hashlib.sha256()
    digest.update(repr((volume.shape, volume.spacing_mm)).encode())
    digest.update(volume.positions_mm.astype("<f8").tobytes())
    for k in range(volume.shape[0]):
        plane = volume.plane(k)
        digest.update(plane.astype("<f4" if plane.dtype != np.float64 else "<f8").tobytes())
    return digest.hexdigest()


def run_measurement(
    name: str,
    volume: Volume,
    regions: Sequence[Region] = (),
    settings: Settings | None = None,
    *,
    pictures: bool = True,
) -> tuple[Record, ...]:
    """Measure and return the records: one a region, or one in all where regions belong together.

    Parameters
    ----------
    name, volume, regions, settings
        As for :func:`ct_measure_plugin.measure`, the settings complete.
    pictures : bool
        Whether each record carries a small picture of its slice.
    """
    measurement = find(name)
    settings = measurement.settings_type() if settings is None else settings
    regions = expanded(name, regions)
    answers = measure_each(name, volume, regions, settings=settings)
    if measurement.regions.together or not regions:
        groups = [tuple(regions)]
    else:
        groups = [(region,) for region in regions]
    return tuple(
        Record.of(
            name, settings, group, volume, answer,
            preview=preview_of(volume, group) if pictures else None,
        )
        for group, answer in zip(groups, answers, strict=True)
    )  # fmt: skip


def run_plan(
    plan: Plan,
    volume: Volume,
    *,
    progress: Callable[[int, int], None] | None = None,
    cancel: Callable[[], bool] | None = None,
) -> tuple[Record, ...]:
    """Measure every step of a plan on one volume, in order.

    Parameters
    ----------
    plan : Plan
        What to measure.
    volume : Volume
        On what.
    progress : callable, optional
        Called with steps done and steps in all.
    cancel : callable, optional
        Asked before each step; if it says True, Cancelled is raised.
    """
    if not volume.source.content_digest:
        source = replace(volume.source, content_digest=content_digest(volume))
        volume = replace(volume, source=source)
    found: list[Record] = []
    for i, step in enumerate(plan.steps):
        if cancel is not None and cancel():
            raise Cancelled("the plan was stopped; nothing was kept")
        found += run_measurement(
            step.measurement, volume, step.typed_regions(), step.typed_settings()
        )
        if progress is not None:
            progress(i + 1, len(plan.steps))
    return tuple(found)


def replay(record: Record, volume: Volume) -> Record:
    """Ask a record's question again, of the same volume or another, and return the new record."""
    regions = record.typed_regions()
    settings = record.typed_settings()
    [found] = run_measurement(record.measurement, volume, regions, settings)
    return found
