"""From a plan and a series to records: in this process, or on Dask workers.

What belongs here: the one way in which docks, commands and workers measure, so that a number is the
same through every door. What it may import: records, measurements, dicom, physics, dask. What it
must not do: arithmetic on results, drawing, printing.
"""

from __future__ import annotations

from ct_measure_plugin.run.against import run_against
from ct_measure_plugin.run.many import run_many
from ct_measure_plugin.run.one import content_digest, replay, run_measurement, run_plan
from ct_measure_plugin.run.preview import preview_of

__all__ = [
    "content_digest",
    "preview_of",
    "replay",
    "run_against",
    "run_many",
    "run_measurement",
    "run_plan",
]
