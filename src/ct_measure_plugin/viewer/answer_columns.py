"""Answers as columns of a layer's features, where other plugins read them."""

from __future__ import annotations

import math
import re
from dataclasses import fields
from functools import cache
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.physics.results import Quantity
from ct_measure_plugin.viewer.region_features import (
    INDEX,
    PREFIX,
    blank_defaults,
    count_of,
    with_labels,
)

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.physics.results import NotMeasured, Result

__all__ = ["put_features", "with_answers", "write_answers"]

#: How the columns of a second and further image end.
_NUMBERED = r"_[0-9]+"


def write_answers(
    layer: Any,
    answers: Mapping[int, Result | NotMeasured],
    *,
    image: str = "",
    suffix: str = "",
    keys: Sequence[int] | None = None,
) -> bool:
    """Write answers into the features, a column a quantity and one for its uncertainty.

    Parameters
    ----------
    layer : napari layer
        Shapes, Points or Labels.
    answers, image, suffix, keys
        As for :func:`with_answers`.

    Returns
    -------
    bool
        Whether anything changed; features that already say it are left alone.
    """
    count = count_of(layer) if keys is None else 0
    features = with_answers(
        layer.features, answers, count=count, image=image, suffix=suffix, keys=keys
    )
    if features is None:
        return False
    put_features(layer, features)
    return True


def put_features(layer: Any, features: Any) -> None:
    """Give a layer other features; the next shape or point starts without answers."""
    layer.features = features
    if INDEX not in features and hasattr(layer, "feature_defaults"):
        blank_defaults(layer)


def with_answers(
    features: Any,
    answers: Mapping[int, Result | NotMeasured],
    *,
    count: int = 0,
    image: str = "",
    suffix: str = "",
    keys: Sequence[int] | None = None,
) -> Any:
    """Return features with answers as columns; it touches no layer, so it may run in any thread.

    Parameters
    ----------
    features : pandas.DataFrame
        A layer's; left as they are.
    answers : mapping of int to Result or NotMeasured
        By row, or by label.
    count : int
        How many shapes or points there are.
    image : str
        The layer that was measured; kept beside the numbers.
    suffix : str
        Added to the columns' names, for a second image measured with the same regions.
    keys : sequence of int, optional
        The labels of a Labels layer.

    Returns
    -------
    pandas.DataFrame or None
        None if they say it already, or if a shape is being drawn.
    """
    before = len(features)
    if keys is None:
        if before not in (0, count):
            return None  # a shape is being drawn: it has its row only when it is finished
        mine = [key for key in answers if 0 <= key < count]
        rows = np.array(mine, dtype=int)
    else:
        features = with_labels(features.copy(), keys)
        at = {int(label): row for row, label in enumerate(features[INDEX])}
        mine = [key for key in answers if key in at]
        rows, count = np.array([at[key] for key in mine], dtype=int), len(features)
    columns = _columns([answers[key] for key in mine], image)
    for name in _written(features, suffix):  # of answers that are no longer there
        columns.setdefault(name, np.full(len(mine), math.nan))
    new: dict[str, NDArray[Any]] = {}
    for name, values in columns.items():
        full = f"{PREFIX}{name}{suffix}"
        column = _changed(features, full, count, rows, values)
        if column is not None:
            new[full] = column
    if not new and len(features) == before:
        return None
    return features.assign(**new)


def _columns(answers: Sequence[Result | NotMeasured], image: str) -> dict[str, NDArray[Any]]:
    """Return the columns of answers, a row each."""
    reasons = ["" if one else str(getattr(one, "reason", "")) for one in answers]
    found: dict[str, NDArray[Any]] = {
        "image": np.array([image] * len(answers), dtype=object),
        "not_measured": np.array(reasons, dtype=object),
    }
    kinds: set[Any] = {type(one) for one in answers}
    names = dict.fromkeys(name for kind in kinds for name in _names(kind))
    for name in names:
        quantities = [getattr(one, name, None) for one in answers]
        known = [one if isinstance(one, Quantity) else None for one in quantities]
        if not any(known):
            continue
        found[name] = np.array([math.nan if one is None else one.value for one in known])
        doubts = [math.nan if one is None else one.uncertainty or math.nan for one in known]
        if not all(map(math.isnan, doubts)):
            found[f"{name}_u"] = np.array(doubts)
    return found


def _written(features: Any, suffix: str) -> list[str]:
    """Return the names of the columns written before for the same image."""
    mine = re.compile(rf"{PREFIX}(\w+?)({_NUMBERED})?$")
    found = (mine.match(str(column)) for column in features.columns)
    return [one[1] for one in found if one is not None and (one[2] or "") == suffix]


@cache
def _names(kind: Any) -> tuple[str, ...]:
    """Return the fields of a result that hold quantities."""
    return tuple(one.name for one in fields(kind) if "Quantity" in str(one.type))


def _changed(
    features: Any, name: str, count: int, rows: NDArray[Any], values: NDArray[Any]
) -> NDArray[Any] | None:
    """Return a column with new values in some rows, None if it holds them already."""
    text = values.dtype == object
    known = name in features
    if text:
        column = features[name].to_numpy(dtype=object, copy=True) if known else _texts(count)
        same = known and bool(np.all(column[rows] == values))
    else:
        column = np.full(count, math.nan)
        if known:
            column[:] = features[name].to_numpy(dtype=float, na_value=math.nan)
        same = known and np.array_equal(column[rows], values, equal_nan=True)
    column[rows] = values
    return None if same else column


def _texts(count: int) -> NDArray[Any]:
    return np.array([""] * count, dtype=object)
