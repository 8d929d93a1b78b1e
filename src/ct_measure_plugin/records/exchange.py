"""Records out to CSV and JSON, and back from JSON."""

from __future__ import annotations

import csv
import json
from pathlib import Path
from typing import TYPE_CHECKING

from pydantic import TypeAdapter, ValidationError

from ct_measure_plugin.errors import RecordError
from ct_measure_plugin.physics.results import NotMeasured, Quantity, quantities_of
from ct_measure_plugin.physics.tables import tables_of
from ct_measure_plugin.records.record import Record

if TYPE_CHECKING:
    from collections.abc import Sequence

__all__ = ["COLUMNS", "read_json", "rows_of", "write_csv", "write_json"]

#: One row a quantity: long tables survive new measurements, wide ones do not.
COLUMNS = (
    "record", "created", "software", "measurement", "series", "title", "kernel", "kvp", "region",
    "z_mm", "quantity", "value", "uncertainty", "unit", "cautions", "not_measured",
)  # fmt: skip

_MANY = TypeAdapter(tuple[Record, ...])


def rows_of(record: Record) -> list[dict[str, str]]:
    """Return a record's rows for a table: one a quantity, or one that says why there is none.

    Numbers of a result's own tables follow as ``table.column``, the row's name in place of the
    region's.
    """
    answer = record.answer()
    positions = [region.get("z_mm") for region in record.regions]
    shared = {
        "record": record.id,
        "created": record.created.isoformat(),
        "software": record.software,
        "measurement": record.measurement,
        "series": record.source.series_digest[:16],
        "title": safe_cell(record.source.title),
        "kernel": safe_cell(" ".join(record.source.kernel)),
        "kvp": " ".join(f"{kvp:g}" for kvp in record.source.kvp),
        "region": safe_cell(record.region_names),
        "z_mm": " ".join("" if z is None else str(z) for z in positions),
        "cautions": " ".join(dict.fromkeys(caution.code for caution in answer.cautions)),
    }
    if isinstance(answer, NotMeasured):
        return [{**shared, "not_measured": safe_cell(f"{answer.reason}. {answer.remedy}")}]
    rows = [{**shared, **_row(name, one)} for name, one in quantities_of(answer).items()]
    for table, found in tables_of(answer).items():
        for called, name, one in found.quantities():
            own = {"region": safe_cell(called)}
            rows.append({**shared, **own, **_row(f"{table}.{name}", one)})
    return rows


def _row(name: str, quantity: Quantity) -> dict[str, str]:
    return {
        "quantity": name,
        "value": repr(quantity.value),
        "uncertainty": "" if quantity.uncertainty is None else repr(quantity.uncertainty),
        "unit": quantity.unit,
    }


def write_csv(records: Sequence[Record], path: str | Path) -> Path:
    """Write records as CSV, one row a quantity, UTF-8 with a byte-order mark for spreadsheets."""
    file = Path(path)
    with file.open("w", newline="", encoding="utf-8-sig") as stream:
        writer = csv.DictWriter(stream, COLUMNS, restval="")
        writer.writeheader()
        for record in records:
            writer.writerows(rows_of(record))
    return file


def write_json(records: Sequence[Record], path: str | Path) -> Path:
    """Write records as JSON, complete: :func:`read_json` gives the same records back."""
    file = Path(path)
    data = [record.model_dump(mode="json") for record in records]
    file.write_text(json.dumps(data, indent=1, ensure_ascii=False) + "\n", encoding="utf-8")
    return file


def read_json(path: str | Path) -> tuple[Record, ...]:
    """Read records that :func:`write_json` wrote.

    Raises
    ------
    RecordError
        If the file cannot be read or holds something else.
    """
    file = Path(path)
    try:
        return _MANY.validate_json(file.read_bytes())
    except OSError as error:
        raise RecordError(f"{file.name} cannot be read ({error.strerror})") from None
    except ValidationError:
        raise RecordError(f"{file.name} does not hold records of this program") from None


def safe_cell(text: str) -> str:
    """Return text that no spreadsheet takes for a formula.

    >>> safe_cell("=1+1"), safe_cell("water")
    ("'=1+1", 'water')
    """
    flat = " ".join(text.split())
    return f"'{flat}" if flat[:1] in ("=", "+", "-", "@") else flat
