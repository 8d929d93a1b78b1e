"""Answers of other measurements as settings: out of records that were saved as JSON."""

from __future__ import annotations

import json
import zlib
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.measurements.packed_arrays import unpacked
from ct_measure_plugin.physics.results import Curve, Picture, Quantity

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["curve_in", "only_result", "picture_in", "quantity_in"]

#: No file of records that one answer is taken from is larger.
LARGEST_FILE = 64 * 2**20


def only_result(
    path: str | Path, wanted: Callable[[dict[str, Any]], bool], what: str
) -> dict[str, Any]:
    """Return the one result of a kind in a file of records.

    Parameters
    ----------
    path : path
        From ``ct-measure measure … --save``, or a dock's Export as JSON.
    wanted : callable
        Told a record, says whether it is of the kind.
    what : str
        The kind in words, for the message.

    Returns
    -------
    dict
        The record's result, still in text.

    Raises
    ------
    ValueError
        If the file cannot be read, or holds none of the kind, or several.
    """
    file = Path(path).expanduser()
    try:
        if file.stat().st_size > LARGEST_FILE:
            raise ValueError(f"{file.name} is too large for a file of records")
        data = json.loads(file.read_bytes())
    except OSError as error:
        raise ValueError(f"{file.name} cannot be read ({error.strerror})") from None
    except (json.JSONDecodeError, UnicodeDecodeError, RecursionError):
        raise ValueError(f"{file.name} is not JSON; records saved as JSON are wanted") from None
    records = data.get("records", [data]) if isinstance(data, dict) else data
    if not isinstance(records, list):
        raise ValueError(f"{file.name} holds no records")
    found = [
        one["result"]
        for one in records
        if isinstance(one, dict) and isinstance(one.get("result"), dict) and wanted(one)
    ]
    if len(found) != 1:
        count = "no" if not found else str(len(found))
        raise ValueError(f"{file.name} holds {count} {what}; one is wanted")
    result: dict[str, Any] = found[0]
    return result


def curve_in(result: dict[str, Any], name: str) -> Curve:
    """Return a curve of a result in text.

    Raises
    ------
    ValueError
        If there is none of that name.
    """
    return Curve(**_parts(result, name, "Curve"))


def picture_in(result: dict[str, Any], name: str) -> Picture:
    """Return a picture of a result in text; ValueError if there is none of that name."""
    parts = _parts(result, name, "Picture")
    plain: dict[str, Any] = {k: tuple(v) if isinstance(v, list) else v for k, v in parts.items()}
    return Picture(**plain)


def quantity_in(result: dict[str, Any], name: str) -> Quantity:
    """Return a number of a result in text; ValueError if there is none of that name."""
    return Quantity(**_parts(result, name, "Quantity"))


def _parts(result: dict[str, Any], name: str, kind: str) -> dict[str, Any]:
    given = result.get(name)
    try:
        if not isinstance(given, dict) or given["is"] != kind:
            raise TypeError(name)
        plain = {key: value for key, value in given.items() if key not in ("is", "data")}
        return {key: _plain(value) for key, value in plain.items()}
    except (KeyError, TypeError, ValueError, OverflowError, zlib.error):
        raise ValueError(f"the record holds no '{name}' that can be read") from None


def _plain(value: Any) -> Any:
    return unpacked(value) if isinstance(value, dict) and value.get("is") == "array" else value
