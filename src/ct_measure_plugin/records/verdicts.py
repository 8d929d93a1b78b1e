"""A plan's tolerances held against the records that it gave."""

from __future__ import annotations

from typing import TYPE_CHECKING

from ct_measure_plugin.errors import PlanError
from ct_measure_plugin.measurements import find
from ct_measure_plugin.physics.results import NotMeasured, quantities_of
from ct_measure_plugin.records.tolerances import Verdict, judge

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.records.plan import Plan
    from ct_measure_plugin.records.record import Record

__all__ = ["verdicts_of"]


def verdicts_of(records: Sequence[Record], plan: Plan) -> list[tuple[str, bool]]:
    """Return a sentence a tolerance, and whether it was not failed.

    The records must be those that the plan gave, in its order.

    Raises
    ------
    PlanError
        If a tolerance names a quantity that the result does not have.
    """
    found: list[tuple[str, bool]] = []
    rest = list(records)
    for i, step in enumerate(plan.steps):
        together = find(step.measurement).regions.together
        count = 1 if together or not step.regions else len(step.regions)
        own, rest = rest[:count], rest[count:]
        for record in own:
            answer = record.answer()
            if isinstance(answer, NotMeasured):
                continue
            quantities = quantities_of(answer)
            for tolerance in step.tolerances:
                if tolerance.quantity not in quantities:
                    known = ", ".join(quantities)
                    raise PlanError(
                        {f"steps[{i}].tolerances": f"no '{tolerance.quantity}': {known}"}
                    )
                quantity = quantities[tolerance.quantity]
                verdict = judge(quantity, tolerance)
                low = "-∞" if tolerance.low is None else f"{tolerance.low:g}"
                high = "∞" if tolerance.high is None else f"{tolerance.high:g}"
                line = f"{verdict.value}: {record.region_names}, {tolerance.quantity} {quantity}"
                found.append((f"{line} within [{low}, {high}]", verdict is not Verdict.FAIL))
    return found
