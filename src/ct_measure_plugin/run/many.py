"""A plan on many series, in this process or on Dask workers."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

from ct_measure_plugin.errors import CtMeasureError
from ct_measure_plugin.run.one import run_plan

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.records import Plan, Record

__all__ = ["run_many"]


def run_many(
    plan: Plan, folders: Sequence[str | Path], *, client: Any = None
) -> dict[str, tuple[Record, ...] | CtMeasureError]:
    """Measure a plan on the series of many folders.

    Parameters
    ----------
    plan : Plan
        What to measure on each.
    folders : sequence of path
        One series each.
    client : dask.distributed.Client, optional
        Where to work; None works here, one after the other.

    Returns
    -------
    dict
        Folder -> its records, or the error that says why there are none; one bad folder does not
        stop the others.
    """
    if client is None:
        return {str(folder): _one(plan, str(folder)) for folder in folders}
    futures = {str(folder): client.submit(_one, plan, str(folder)) for folder in folders}
    return {folder: future.result() for folder, future in futures.items()}


def _one(plan: Plan, folder: str) -> tuple[Record, ...] | CtMeasureError:
    from ct_measure_plugin.dicom import read_series

    try:
        return run_plan(plan, read_series(folder))
    except CtMeasureError as error:
        return error
