"""Results as plain dictionaries, and back to the same result to the last bit.

A result's class is found by name in the module of the measurement's own result type, so nothing
that a file names is ever imported or run.
"""

from __future__ import annotations

import sys
import zlib
from dataclasses import fields, is_dataclass
from typing import Any

import numpy as np

from ct_measure_plugin.errors import RecordError
from ct_measure_plugin.measurements.packed_arrays import packed, unpacked
from ct_measure_plugin.physics.results import Caution, Curve, NotMeasured, Picture, Quantity, Result

__all__ = ["answer_from_dict", "answer_to_dict"]

_SHARED = {kind.__name__: kind for kind in (Caution, Curve, NotMeasured, Picture, Quantity)}


def answer_to_dict(answer: Result | NotMeasured) -> dict[str, Any]:
    """Return an answer as nested dictionaries and lists that JSON can hold exactly."""
    encoded = _encode(answer)
    if not isinstance(encoded, dict):
        raise RecordError("an answer must be a Result or a NotMeasured")
    return encoded


def answer_from_dict(given: dict[str, Any], result_type: type[Result]) -> Result | NotMeasured:
    """Rebuild an answer.

    Parameters
    ----------
    given : dict
        From :func:`answer_to_dict`.
    result_type : type of Result
        The measurement's result type; its module also holds the types of its parts.

    Raises
    ------
    RecordError
        If the text does not describe such a result.
    """
    module = sys.modules[result_type.__module__]
    try:
        found = _decode(given, module)
    except (AttributeError, KeyError, TypeError, ValueError, zlib.error) as error:
        raise RecordError(
            f"the record's result cannot be rebuilt ({type(error).__name__})"
        ) from None
    if not isinstance(found, Result | NotMeasured):
        raise RecordError("the record holds no result")
    return found


def _encode(value: Any) -> Any:
    if is_dataclass(value) and not isinstance(value, type):
        parts = {field.name: _encode(getattr(value, field.name)) for field in fields(value)}
        return {"is": type(value).__name__, **parts}
    if isinstance(value, np.ndarray):
        return packed(value)
    if isinstance(value, tuple | list):
        return [_encode(part) for part in value]
    if isinstance(value, np.generic):
        return value.item()
    return value


def _decode(given: Any, module: Any) -> Any:
    if isinstance(given, list):
        return tuple(_decode(part, module) for part in given)
    if not isinstance(given, dict):
        return given
    if given.get("is") == "array":
        return unpacked(given)
    name = given["is"]
    kind = _SHARED.get(name) or getattr(module, name)
    if not (isinstance(kind, type) and is_dataclass(kind)):
        raise TypeError(name)
    parts = {key: _decode(value, module) for key, value in given.items() if key != "is"}
    return kind(**parts)
