"""A plan on two volumes: the records of both, and what changed."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

from ct_measure_plugin.measurements import compare
from ct_measure_plugin.records import Record
from ct_measure_plugin.run.one import content_digest
from ct_measure_plugin.run.preview import preview_of

if TYPE_CHECKING:
    from ct_measure_plugin.measurements import Comparison
    from ct_measure_plugin.physics.volume import Volume
    from ct_measure_plugin.records import Plan

__all__ = ["run_against"]


def run_against(
    plan: Plan, first: Volume, second: Volume
) -> tuple[tuple[Record, ...], tuple[tuple[str, tuple[Comparison, ...]], ...]]:
    """Measure every step of a plan on two volumes.

    Returns
    -------
    records : tuple of Record
        Those of the first volume and of the second, region by region.
    changes : tuple of (str, tuple of Comparison)
        By step, the measurement and its comparisons.
    """
    first, second = _digested(first), _digested(second)
    records: list[Record] = []
    changes = []
    for step in plan.steps:
        settings, regions = step.typed_settings(), step.typed_regions()
        found = compare(step.measurement, first, second, regions, settings=settings)
        for one in found:
            records += [
                Record.of(
                    step.measurement, settings, one.regions, volume, answer,
                    preview=preview_of(volume, one.regions),
                )
                for volume, answer in ((first, one.first), (second, one.second))
            ]  # fmt: skip
        changes.append((step.measurement, found))
    return tuple(records), tuple(changes)


def _digested(volume: Volume) -> Volume:
    if volume.source.content_digest:
        return volume
    return replace(volume, source=replace(volume.source, content_digest=content_digest(volume)))
