"""Statistics of every label of a label map in one pass over the volume.

CT numbers are whole and few, so a label's pixels are known entirely by how many of them hold each
value: one counting pass makes that table for all labels, and every first-order statistic, the exact
median and percentiles among them, follows from the table. Values that are not whole, or spread too
far for a table, are sorted by label and value instead.
"""

from __future__ import annotations

import math
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["LabelNumbers", "label_numbers", "label_quantiles"]

#: Entries of the table of counts, labels times values: 4 million take 32 MB.
TABLE = 1 << 22

#: Voxels counted at once by a thread; keeps its keys within the processor's cache.
CHUNK = 1 << 18

#: Share of labelled voxels in a chunk below which picking them out saves time.
SPARSE = 0.5

#: Threads that count; more would mostly wait for memory.
THREADS = 2


@dataclass(frozen=True, slots=True, eq=False)
class LabelNumbers:
    """Plain numbers of every label, each an array of shape (labels,).

    Attributes
    ----------
    label : ndarray of int
        The labels that occur, increasing; 0 is background and is left out.
    n : ndarray
        Pixels with a finite value.
    lost : ndarray
        Pixels without one.
    mean, sd, population_sd, minimum, maximum, skewness, kurtosis : ndarray
        As in :class:`ct_measure_plugin.physics.region_statistics.RegionStatistics`; sd is NaN for
        a label of one pixel, and all are NaN for one without a finite value.
    percentiles : ndarray, shape (labels, percentiles)
        In the order asked for.
    whole : ndarray of bool
        Whether all values of a label are whole numbers.
    runs : object
        Distinct values with their counts, for :func:`label_quantiles`.
    """

    label: NDArray[np.int64]
    n: NDArray[np.int64]
    lost: NDArray[np.int64]
    mean: Floats
    sd: Floats
    population_sd: Floats
    minimum: Floats
    maximum: Floats
    skewness: Floats
    kurtosis: Floats
    percentiles: Floats
    whole: NDArray[np.bool_]
    runs: _Runs = field(repr=False)


def label_numbers(
    values: NDArray[Any],
    labels: NDArray[Any],
    *,
    percentiles: tuple[float, ...] = (10.0, 25.0, 50.0, 75.0, 90.0),
) -> LabelNumbers:
    """Return the first-order statistics of every label.

    Parameters
    ----------
    values : ndarray of real numbers
        CT numbers, any shape.
    labels : ndarray of int, same shape
        0 is background.
    percentiles : tuple of float
        0 to 100; interpolated linearly, as numpy's default does.

    Raises
    ------
    ArgumentError
        If the shapes differ, or the labels are not whole numbers.

    Examples
    --------
    >>> found = label_numbers(np.array([[3, 5, 7], [1, 1, 9]]), np.array([[1, 1, 1], [0, 4, 4]]))
    >>> found.label.tolist(), found.mean.tolist(), found.percentiles[:, 2].tolist()
    ([1, 4], [5.0, 5.0], [5.0, 5.0])
    """
    if labels.shape != values.shape:
        raise ArgumentError("labels", f"must have the values' shape {values.shape}", labels.shape)
    if labels.dtype.kind not in "iub":
        raise ArgumentError("labels", "must hold whole numbers", str(labels.dtype))
    if not all(0 <= p <= 100 for p in percentiles):
        raise ArgumentError("percentiles", "must lie within 0 to 100", percentiles)
    v = np.ascontiguousarray(values).ravel()
    owner = np.ascontiguousarray(labels).ravel()
    if owner.dtype.kind == "b":
        owner = owner.view(np.uint8)
    whole = _by_counting(v, owner)
    return _from_runs(whole if whole is not None else _by_sorting(v, owner), percentiles)


@dataclass(frozen=True, slots=True, eq=False)
class _Runs:
    """Distinct values of each label with their counts, labels one after the other.

    `start` holds where each label's runs begin, and one entry more.
    """

    label: NDArray[np.int64]
    lost: NDArray[np.int64]
    start: NDArray[np.int64]
    value: Floats
    count: NDArray[np.int64]


def _by_counting(v: NDArray[Any], owner: NDArray[Any]) -> _Runs | None:
    """Count pixels by label and value, or return None where a table would be too large."""
    if v.dtype.kind not in "iu" or v.size == 0:
        return None
    low, high = int(v.min()), int(v.max())
    first, last = int(owner.min()), int(owner.max())
    width, rows = high - low + 1, last - first + 1
    if width * rows > max(TABLE, v.size // 4) or rows * width > 1 << 31:
        return None
    if max(abs(first), abs(last)) * width + max(abs(low), abs(high)) > 1 << 31:
        return None  # the keys would not fit
    bounds = list(range(0, v.size, CHUNK))

    def count(part: int) -> NDArray[np.int64]:
        table = np.zeros(rows * width, np.int64)
        for begin in bounds[part::THREADS]:
            own, value = owner[begin : begin + CHUNK], v[begin : begin + CHUNK]
            inside = own != 0
            labelled = int(np.count_nonzero(inside))
            if not labelled:
                continue
            if labelled < SPARSE * len(own):
                at = np.flatnonzero(inside)
                own, value = own[at], value[at]
            key = own.astype(np.int32)
            key -= first
            key *= width
            key += value.astype(np.int32, copy=False)
            key -= low
            found = np.bincount(key)
            table[: len(found)] += found
        return table

    with ThreadPoolExecutor(THREADS) as pool:
        table = sum(pool.map(count, range(THREADS))).reshape(rows, width)  # type: ignore[union-attr]
    label = np.arange(first, last + 1)
    table[label == 0] = 0
    kept = np.flatnonzero(table.any(axis=1))
    row, column = np.nonzero(table[kept])
    return _Runs(
        label[kept].astype(np.int64),
        np.zeros(len(kept), np.int64),
        np.searchsorted(row, np.arange(len(kept) + 1)),
        (column + low).astype(float),
        table[kept][row, column],
    )


def _by_sorting(v: NDArray[Any], owner: NDArray[Any]) -> _Runs:
    """Sort the pixels of the labels by label, then by value."""
    inside = np.flatnonzero(owner)
    own, value = owner[inside].astype(np.int64), v[inside].astype(float)
    label, number = np.unique(own, return_inverse=True)
    finite = np.isfinite(value)
    lost = np.bincount(number[~finite], minlength=len(label))
    number, value = number[finite], value[finite]
    order = np.lexsort((value, number))
    number, value = number[order], value[order]
    new = np.ones(len(value), bool)
    new[1:] = (np.diff(number) != 0) | (np.diff(value) != 0)
    at = np.flatnonzero(new)
    count = np.diff(np.append(at, len(value)))
    start = np.searchsorted(number[at], np.arange(len(label) + 1))
    return _Runs(label, lost, start, value[at], count)


def _from_runs(runs: _Runs, percentiles: tuple[float, ...]) -> LabelNumbers:
    """Return every statistic from the distinct values and their counts."""
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        return _statistics(runs, percentiles)


def _statistics(runs: _Runs, percentiles: tuple[float, ...]) -> LabelNumbers:
    labels = len(runs.label)
    row = np.repeat(np.arange(labels), np.diff(runs.start))
    n = np.bincount(row, runs.count, minlength=labels).astype(np.int64)
    filled = n > 0
    safe = np.maximum(n, 1)
    # sums about a value of the label's own keep their digits
    anchor = np.zeros(labels)
    anchor[filled] = runs.value[runs.start[:-1][filled]]
    shifted = np.bincount(row, runs.count * (runs.value - anchor[row]), minlength=labels) / safe
    mean = anchor + shifted
    residual = runs.value - mean[row]
    power = runs.count * residual
    m2, m3, m4 = (
        np.bincount(row, np.multiply(power, residual, out=power), minlength=labels) / safe
        for _ in range(3)
    )
    last = np.maximum(runs.start[1:] - 1, 0)
    highest = runs.value[last] if len(runs.value) else np.zeros(labels)
    spread = highest - anchor
    m2 = np.where(spread == 0, 0.0, m2)  # equal values: rounding must not invent a spread
    curved = m2 > 0
    divisor = np.where(curved, m2, 1.0)
    nothing = np.where(filled, 0.0, math.nan)
    shares = np.asarray(percentiles, float) / 100.0
    sd = np.sqrt(m2 * n / (n - 1.0))
    return LabelNumbers(
        runs.label,
        n,
        runs.lost,
        mean + nothing,
        np.where(n > 1, sd, math.nan),
        np.sqrt(m2) + nothing,
        anchor + nothing,
        highest + nothing,
        np.where(curved, m3 / divisor**1.5, 0.0) + nothing,
        np.where(curved, m4 / divisor**2 - 3.0, 0.0) + nothing,
        _quantiles(runs, n, np.broadcast_to(shares, (labels, len(shares)))),
        np.bincount(row, np.rint(runs.value) != runs.value, minlength=labels) == 0,
        runs,
    )


def label_quantiles(found: LabelNumbers, at: Floats) -> Floats:
    """Return quantiles of every label at places of its own, shape (labels, k).

    Parameters
    ----------
    found : LabelNumbers
        The labels.
    at : ndarray, shape (labels, k)
        0 to 1; what lies beyond counts as the end.

    Examples
    --------
    >>> found = label_numbers(np.array([3.0, 5.0, 7.0, 1.0]), np.array([1, 1, 1, 2]))
    >>> label_quantiles(found, np.array([[0.25], [0.5]])).tolist()
    [[4.0], [1.0]]
    """
    return _quantiles(found.runs, found.n, np.clip(at, 0.0, 1.0))


def _quantiles(runs: _Runs, n: NDArray[np.int64], at: Floats) -> Floats:
    """Interpolate linearly between order statistics, all labels in one go."""
    found = np.full(at.shape, math.nan)
    rows = np.flatnonzero(n > 0)
    if not len(rows):
        return found
    upto = np.cumsum(runs.count)  # pixels up to and with each run
    before = (np.cumsum(n) - n)[rows]
    last = n[rows] - 1
    for i in range(at.shape[1]):
        place = at[rows, i] * last
        below = np.floor(place).astype(np.int64)
        above = np.minimum(below + 1, last)
        low = runs.value[np.searchsorted(upto, before + below, "right")]
        high = runs.value[np.searchsorted(upto, before + above, "right")]
        found[rows, i] = low + (place - below) * (high - low)
    return found
