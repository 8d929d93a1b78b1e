"""What is known about regions beside their outline, kept in the layer's own features.

Names, classes, codes and slice ranges live in columns of ``layer.features``, and so do the newest
answers: other plugins read them there, napari shows them as text, and they go wherever the layer
goes. Columns that we did not make are left as they are.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.regions import LONGEST_CODE

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

__all__ = [
    "CLASS",
    "CODE",
    "ELLIPSOID",
    "HIGH",
    "ID",
    "INDEX",
    "LOW",
    "NAME",
    "PREFIX",
    "SWEPT",
    "Z_HIGH",
    "Z_LOW",
    "Tags",
    "blank_defaults",
    "checked_code",
    "count_of",
    "ids_on",
    "set_column",
    "tags_on",
    "with_labels",
]

NAME, CLASS, CODE = "name", "class", "code"
Z_LOW, Z_HIGH = "z_low_mm", "z_high_mm"
LOW, HIGH = "value_low", "value_high"

#: The column that says what a disc or an ellipse over several slices is swept to: nothing for a
#: cylinder, or ELLIPSOID.
SWEPT, ELLIPSOID = "swept_to", "ellipsoid"

#: A number that stays with a region, whatever its place on the layer.
ID = "region_id"

#: Before the names of columns that hold answers, so that nobody else's are overwritten.
PREFIX = "ct_"

#: The column of a Labels layer's features that names the label of each row; napari's own word.
INDEX = "index"


@dataclass(frozen=True, slots=True)
class Tags:
    """What the features say about one region.

    Attributes
    ----------
    name, group, code : str
        What people call it, its class, and the class as "scheme:value".
    z_mm : (float, float)
        First and last slice it reaches over; NaN where nothing was said, infinite for all slices.
    values : (float, float)
        Lowest and highest value that counts; NaN where nothing was said.
    swept : str
        "ellipsoid" where the range of slices is that of one; else the form is the same on all.
    """

    name: str = ""
    group: str = ""
    code: str = ""
    z_mm: tuple[float, float] = (math.nan, math.nan)
    values: tuple[float, float] = (math.nan, math.nan)
    swept: str = ""

    def words(self) -> dict[str, Any]:
        """Return what every kind of region takes besides its place: class, code, threshold."""
        low, high = self.values
        known = not (math.isnan(low) and math.isnan(high))
        ends = (-math.inf if math.isnan(low) else low, math.inf if math.isnan(high) else high)
        return {"group": self.group, "code": self.code, "values": ends if known else None}


def tags_on(layer: Any, keys: Sequence[int] | None = None) -> list[Tags]:
    """Return what the features of a layer say about its regions, one a region.

    Parameters
    ----------
    layer : napari layer
        Shapes, Points or Labels.
    keys : sequence of int, optional
        The labels of a Labels layer, whose features name the label of each row.
    """
    features = layer.features
    count = count_of(layer) if keys is None else len(keys)
    if not len(features.columns):
        return [Tags()] * count
    rows = range(count) if keys is None else _rows_of_labels(layer, keys)
    texts = [_column(features, name) for name in (NAME, CLASS, CODE, SWEPT)]
    numbers = [_column(features, name) for name in (Z_LOW, Z_HIGH, LOW, HIGH)]

    def tags(row: int) -> Tags:
        name, group, code, swept = (_text(column, row) for column in texts)
        z_low, z_high, low, high = (_number(column, row) for column in numbers)
        return Tags(name, group, code, (z_low, z_high), (low, high), swept)

    return [tags(row) for row in rows]


def set_column(
    layer: Any, column: str, values: Mapping[int, Any], keys: Sequence[int] | None = None
) -> None:
    """Write values of one column; other rows and other columns stay as they are.

    Parameters
    ----------
    layer : napari layer
        Shapes, Points or Labels.
    column : str
        The column, made if there is none.
    values : mapping of int to object
        By row, or by label.
    keys : sequence of int, optional
        The labels of a Labels layer.
    """
    _set_columns(layer, {column: values}, keys)


def ids_on(layer: Any) -> list[int]:
    """Return a number for each shape or point that stays with it; missing ones are given out.

    A pasted shape brings the number of the one it was copied from and gets a new one.
    """
    count = count_of(layer)
    known = _column(layer.features, ID)
    found: list[int] = []
    used: set[int] = set()
    highest = max((int(n) for n in map(_finite, known) if n is not None), default=0)
    for row in range(count):
        number = _finite(known[row]) if row < len(known) else None
        if number is None or number < 1 or int(number) in used:
            highest += 1
            number = highest
        used.add(int(number))
        found.append(int(number))
    if found != [_finite(n) for n in known[:count]]:
        set_column(layer, ID, dict(enumerate(found)))
    return found


def checked_code(text: str) -> str:
    """Return a class's code, tidied.

    Parameters
    ----------
    text : str
        "scheme:value" as in DICOM's coded entries, or empty.

    Raises
    ------
    ArgumentError
        If it is neither.

    Examples
    --------
    >>> checked_code(" SCT : 10200004 ")
    'SCT:10200004'
    """
    if not text.strip():
        return ""
    scheme, colon, value = (part.strip() for part in text.partition(":"))
    fits = all(0 < len(part) <= LONGEST_CODE for part in (scheme, value))
    if not (colon and fits and "\\" not in text):
        rule = f"must be scheme:value, each of 1 to {LONGEST_CODE} characters"
        raise ArgumentError("code", rule, text)
    return f"{scheme}:{value}"


def count_of(layer: Any) -> int:
    """Return how many shapes or points a layer has."""
    return int(layer.nshapes) if hasattr(layer, "nshapes") else len(layer.data)


def _set_columns(
    layer: Any, columns: Mapping[str, Mapping[int, Any]], keys: Sequence[int] | None
) -> bool:
    features = layer.features.copy()
    if keys is None:
        count = count_of(layer)
        rows = {row: row for row in range(count)}
        if len(features) not in (0, count):
            return False  # a shape is being drawn: it has its row only when it is finished
    else:
        features = with_labels(features, keys)
        rows = {int(label): row for row, label in enumerate(features[INDEX])}
        count = len(features)
    changed = keys is not None and len(features) != len(layer.features)
    for name, values in columns.items():
        known = _column(features, name) or [_blank(values)] * count
        mine = {rows[key]: value for key, value in values.items() if key in rows}
        if all(_same(known[row], value) for row, value in mine.items()) and name in features:
            continue
        for row, value in mine.items():
            known[row] = value
        features[name] = known
        changed = True
    if not changed:
        return False
    layer.features = features
    if keys is None and hasattr(layer, "feature_defaults"):
        blank_defaults(layer)
    return True


def blank_defaults(layer: Any) -> None:
    """Let the next region start without the last one's name, number and answers.

    It keeps the last one's class: who annotates draws many of one class in a row.
    """
    defaults = layer.feature_defaults.copy()
    for name in defaults.columns:
        if name in (NAME, ID, Z_LOW, Z_HIGH, LOW, HIGH, SWEPT) or name.startswith(PREFIX):
            blank = {"f": math.nan, "i": 0, "u": 0, "b": False}.get(defaults[name].dtype.kind, "")
            defaults[name] = [blank]
    layer.feature_defaults = defaults


def with_labels(features: Any, keys: Sequence[int]) -> Any:
    """Return the features of a Labels layer with a row for every label."""
    import pandas as pd

    if INDEX not in features:
        features.insert(0, INDEX, range(len(features)))
    known = {int(label) for label in features[INDEX]}
    new = [int(label) for label in keys if int(label) not in known]
    if not new:
        return features
    rows = pd.DataFrame({INDEX: new}).reindex(columns=features.columns)
    if not len(features):
        return rows
    joined = {
        name: [*features[name], *([_blank_like(features[name])] * len(new))]
        for name in features.columns
    }
    joined[INDEX] = [*features[INDEX], *new]
    return pd.DataFrame(joined)


def _rows_of_labels(layer: Any, keys: Sequence[int]) -> list[int]:
    features = layer.features
    if INDEX not in features:
        return [int(key) for key in keys]
    at = {int(label): row for row, label in enumerate(features[INDEX])}
    return [at.get(int(key), len(features)) for key in keys]


def _column(features: Any, name: str) -> list[Any]:
    return list(features[name]) if name in features else []


def _text(column: list[Any], row: int) -> str:
    value = column[row] if row < len(column) else ""
    return value.strip() if isinstance(value, str) else ""


def _number(column: list[Any], row: int) -> float:
    value = column[row] if row < len(column) else math.nan
    try:
        return float(value)
    except (TypeError, ValueError):
        return math.nan


def _finite(value: Any) -> float | None:
    found = _number([value], 0)
    return found if math.isfinite(found) else None


def _blank(values: Mapping[int, Any]) -> Any:
    return "" if any(isinstance(value, str) for value in values.values()) else math.nan


def _blank_like(column: Any) -> Any:
    return math.nan if column.dtype.kind in "fiub" else ""


def _same(one: Any, other: Any) -> bool:
    if isinstance(one, float) and isinstance(other, float) and math.isnan(one):
        return math.isnan(other)
    return bool(one == other)
