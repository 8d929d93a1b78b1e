"""Tables inside results: a field that holds a tuple of like rows, one a rod, a patch, a place.

A row is any dataclass whose fields are text, numbers and Quantities. Reports, exports and docks
find such fields by their type, as they find Quantities and Curves.
"""

from __future__ import annotations

from dataclasses import dataclass, fields, is_dataclass
from typing import TYPE_CHECKING, Any

from ct_measure_plugin.physics.results import Caution, NotMeasured, Quantity, Result, label_of

if TYPE_CHECKING:
    from collections.abc import Iterator

__all__ = ["Table", "tables_of"]


@dataclass(frozen=True, slots=True)
class Table:
    """Rows of one kind.

    Attributes
    ----------
    columns : tuple of str
        Names of the rows' fields that can be shown.
    rows : tuple
        The rows, dataclasses.
    """

    columns: tuple[str, ...]
    rows: tuple[Any, ...]

    @property
    def titles(self) -> tuple[str, ...]:
        """What the columns are called, each with the unit that its Quantities share."""
        return tuple(self._title(name) for name in self.columns)

    def _title(self, name: str) -> str:
        values = [getattr(row, name) for row in self.rows]
        units = {value.unit for value in values if isinstance(value, Quantity)}
        unit = units.pop() if len(units) == 1 else ""
        return f"{label_of(name)} ({unit})" if unit else label_of(name)

    def cells(self) -> Iterator[tuple[str, ...]]:
        """Return the rows as text, Quantities without the unit that stands in the title."""
        for row in self.rows:
            yield tuple(_text(getattr(row, name)) for name in self.columns)

    def quantities(self) -> Iterator[tuple[str, str, Quantity]]:
        """Return every Quantity with the row's name (or number, from 1) and the column's."""
        for number, row in enumerate(self.rows, start=1):
            called = str(getattr(row, "name", "") or number)
            for name in self.columns:
                value = getattr(row, name)
                if isinstance(value, Quantity):
                    yield called, name, value


def tables_of(result: Result) -> dict[str, Table]:
    """Return the result's tables by field name, in the order they were declared.

    Examples
    --------
    >>> from ct_measure_plugin.physics import ct_number_line
    >>> from ct_measure_plugin.physics.attenuation import material
    >>> rods = [material(name) for name in ("air", "LDPE", "PMMA", "PTFE", "POM")]
    >>> found = ct_number_line([rod.hu(70.0) for rod in rods], rods, hu_uncertainty=1.0)
    >>> table = tables_of(found)["rods"]
    >>> table.titles[:3], next(iter(table.cells()))[:3]
    (('Name', 'Read (HU)', 'Residual (HU)'), ('air', '-998.9 ± 1.0', '0.0 ± 1.0'))
    """
    found = {}
    for field in fields(result):
        value = getattr(result, field.name)
        if not (isinstance(value, tuple) and value):
            continue
        kinds = {type(row) for row in value}
        kind = kinds.pop()
        if kinds or not is_dataclass(kind) or issubclass(kind, Caution | Result | NotMeasured):
            continue
        columns = tuple(
            one.name
            for one in fields(kind)
            if all(
                isinstance(getattr(row, one.name), str | float | int | Quantity) for row in value
            )
        )
        found[field.name] = Table(columns, value)
    return found


def _text(value: str | float | Quantity) -> str:
    if isinstance(value, Quantity):
        number, doubt = value.rounded()
        return f"{number} ± {doubt}" if doubt else number
    return f"{value:.3g}" if isinstance(value, float) else str(value)
