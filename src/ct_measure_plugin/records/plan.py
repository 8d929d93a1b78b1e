"""The Plan: what to measure and where, as a file that people write and machines repeat."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

import yaml
from pydantic import BaseModel, ConfigDict, Field, ValidationError

from ct_measure_plugin.errors import CtMeasureError, PlanError
from ct_measure_plugin.measurements import find
from ct_measure_plugin.measurements.catalogue import settings_for
from ct_measure_plugin.records.region_text import region_from_dict
from ct_measure_plugin.records.tolerances import Tolerance

if TYPE_CHECKING:
    from ct_measure_plugin.measurements import Settings
    from ct_measure_plugin.physics.regions import Region

__all__ = ["Plan", "PlanStep", "load_plan", "plan_from_dict", "save_plan"]

#: A larger file is not a plan that a person wrote.
LARGEST_FILE = 64 * 2**20


class PlanStep(BaseModel):
    """One measurement with its settings, regions and limits."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    measurement: str
    settings: dict[str, Any] = Field(default_factory=dict)
    regions: tuple[dict[str, Any], ...] = ()
    tolerances: tuple[Tolerance, ...] = ()

    def typed_regions(self) -> tuple[Region, ...]:
        """Build the regions."""
        return tuple(region_from_dict(region) for region in self.regions)

    def typed_settings(self) -> Settings:
        """Build the complete settings."""
        return settings_for(self.measurement, self.settings)


class Plan(BaseModel):
    """What to measure, in order."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    title: str = ""
    steps: tuple[PlanStep, ...] = Field(min_length=1)


def plan_from_dict(given: Any) -> Plan:
    """Return a checked plan.

    Raises
    ------
    PlanError
        With every fault at once, each under its place in the plan.

    Examples
    --------
    >>> step = {"measurement": "region_statistics",
    ...         "regions": [{"kind": "disc", "center_mm": [0, 0], "radius_mm": -4}]}
    >>> plan_from_dict({"steps": [step]})
    Traceback (most recent call last):
    ...
    ct_measure_plugin.errors.PlanError: steps[0].regions[0]: 'radius_mm' must be greater than 0, ...
    """
    try:
        plan = Plan.model_validate(given)
    except ValidationError as error:
        raise PlanError({_place(e["loc"]): e["msg"] for e in error.errors()}) from None
    problems = {}
    for i, step in enumerate(plan.steps):
        problems.update({f"steps[{i}]{where}": what for where, what in _faults(step).items()})
    if problems:
        raise PlanError(problems)
    return plan


def load_plan(path: str | Path) -> Plan:
    """Read a plan from a YAML or JSON file.

    Raises
    ------
    PlanError
        If the file cannot be read or is not a plan.
    """
    file = Path(path)
    try:
        if file.stat().st_size > LARGEST_FILE:
            raise PlanError({file.name: "is too large for a plan"})
        text = file.read_text(encoding="utf-8")
        given = json.loads(text) if file.suffix.lower() == ".json" else yaml.safe_load(text)
    except OSError as error:
        raise PlanError({file.name: f"cannot be read ({error.strerror})"}) from None
    except (ValueError, yaml.YAMLError, RecursionError) as error:
        where = getattr(error, "problem_mark", None)
        line = f" at line {where.line + 1}" if where else ""
        raise PlanError({file.name: f"is not valid YAML or JSON{line}"}) from None
    return plan_from_dict(given)


def save_plan(plan: Plan, path: str | Path) -> Path:
    """Write a plan; the suffix decides between JSON and YAML."""
    file = Path(path)
    data = plan.model_dump(mode="json", exclude_defaults=True)
    if file.suffix.lower() == ".json":
        text = json.dumps(data, indent=2, ensure_ascii=False) + "\n"
    else:
        text = yaml.safe_dump(data, sort_keys=False, allow_unicode=True)
    file.write_text(text, encoding="utf-8")
    return file


def _place(parts: tuple[int | str, ...]) -> str:
    text = ""
    for part in parts:
        text += f"[{part}]" if isinstance(part, int) else f".{part}"
    return text.lstrip(".") or "plan"


def _faults(step: PlanStep) -> dict[str, str]:
    found = {}
    try:
        find(step.measurement)
    except CtMeasureError as error:
        return {".measurement": str(error)}
    try:
        step.typed_settings()
    except CtMeasureError as error:
        found[".settings"] = str(error)
    regions = []
    for k, region in enumerate(step.regions):
        try:
            regions.append(region_from_dict(region))
        except CtMeasureError as error:
            found[f".regions[{k}]"] = str(error)
    if not found:
        try:
            find(step.measurement).check_regions(regions)
        except CtMeasureError as error:
            found[".regions"] = str(error)
    return found
