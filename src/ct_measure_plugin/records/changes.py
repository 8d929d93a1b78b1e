"""What changed from one volume to another, as rows of a table."""

from __future__ import annotations

import csv
from pathlib import Path
from typing import TYPE_CHECKING

from ct_measure_plugin.physics.results import NotMeasured, quantities_of
from ct_measure_plugin.records.exchange import safe_cell

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.measurements import Comparison

__all__ = ["CHANGE_COLUMNS", "change_rows", "write_changes"]

CHANGE_COLUMNS = (
    "measurement", "region", "quantity", "first", "second", "difference", "uncertainty", "unit",
    "paired", "not_measured",
)  # fmt: skip


def change_rows(name: str, comparisons: Sequence[Comparison]) -> list[dict[str, str]]:
    """Return a row for each number that both volumes gave, or for why one gave none.

    Parameters
    ----------
    name : str
        The measurement.
    comparisons : sequence of Comparison
        From :func:`ct_measure_plugin.measurements.compare`.
    """
    rows = []
    for one in comparisons:
        where = ", ".join(region.name or region.kind for region in one.regions)
        head = {"measurement": name, "region": safe_cell(where)}
        refusals = [a for a in (one.first, one.second) if isinstance(a, NotMeasured)]
        if refusals:
            rows.append({**head, "not_measured": safe_cell(refusals[0].reason)})
            continue
        before, after = (
            quantities_of(answer)
            for answer in (one.first, one.second)
            if not isinstance(answer, NotMeasured)
        )
        rows += [
            {
                **head,
                "quantity": called,
                "first": repr(before[called].value),
                "second": repr(after[called].value),
                "difference": repr(change.value),
                "uncertainty": "" if change.uncertainty is None else repr(change.uncertainty),
                "unit": change.unit,
                "paired": "yes" if called in one.paired else "",
            }
            for called, change in one.differences.items()
        ]
    return rows


def write_changes(rows: Sequence[dict[str, str]], path: str | Path) -> Path:
    """Write rows of :func:`change_rows` as CSV, UTF-8 with a byte-order mark for spreadsheets."""
    file = Path(path)
    with file.open("w", newline="", encoding="utf-8-sig") as stream:
        writer = csv.DictWriter(stream, CHANGE_COLUMNS, restval="")
        writer.writeheader()
        writer.writerows(rows)
    return file
