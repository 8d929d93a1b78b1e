"""What was asked and what was found: plans, records, the logbook, exchange formats.

What belongs here: turning questions and answers into text and back, exactly; keeping them; judging
them against tolerances. What it may import: measurements, physics, pydantic, YAML, SQLAlchemy. What
it must not do: measure, draw, or hold anything that identifies a patient.
"""

from __future__ import annotations

from ct_measure_plugin.records.changes import change_rows, write_changes
from ct_measure_plugin.records.exchange import read_json, write_csv, write_json
from ct_measure_plugin.records.label_file import read_labels, write_labels
from ct_measure_plugin.records.logbook import Logbook
from ct_measure_plugin.records.plan import Plan, PlanStep, load_plan, save_plan
from ct_measure_plugin.records.record import Preview, Record, SourceFacts
from ct_measure_plugin.records.region_file import (
    Frame,
    RegionFile,
    read_regions,
    regions_from_text,
    write_regions,
)
from ct_measure_plugin.records.region_text import region_from_dict, region_to_dict
from ct_measure_plugin.records.tolerances import Tolerance, Verdict, judge

__all__ = [
    "Frame",
    "Logbook",
    "Plan",
    "PlanStep",
    "Preview",
    "Record",
    "RegionFile",
    "SourceFacts",
    "Tolerance",
    "Verdict",
    "change_rows",
    "judge",
    "load_plan",
    "read_json",
    "read_labels",
    "read_regions",
    "region_from_dict",
    "region_to_dict",
    "regions_from_text",
    "save_plan",
    "write_changes",
    "write_csv",
    "write_json",
    "write_labels",
    "write_regions",
]
