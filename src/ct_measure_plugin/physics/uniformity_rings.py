"""Rings in a cylinder's field: narrow departures from the smooth fit, which are left out of it."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import ndimage

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]
    Whole = NDArray[np.intp]

__all__ = ["Circles", "CleanField", "clean_field"]

#: Circles whose mean leaves the smooth course by so many standard deviations do not count; nearer
#: ones count by Tukey's biweight, which costs 1 % of what pure noise would tell.
LEAVING = 6.0

#: Number of circles whose median is the smooth course: rings are narrower than half of them.
COURSE = 15

#: Departures below this are no rings, HU: rounding.
LEAST = 0.02

#: Circles in a block: rings and their lobes are narrower, so that blocks are independent.
BLOCK = 8

#: A cell of which the rings leave less than this keeps all its pixels.
LEAST_LEFT = 0.2

ROUNDS = 4


@dataclass(frozen=True, slots=True, eq=False)
class Circles:
    """Pixels of one slice's field, counted by cell and by circle about the rotation centre.

    Attributes
    ----------
    cell, circle : ndarray of int, shape (pairs,)
        Of each pair that holds a pixel.
    count : ndarray, shape (pairs,)
        Number of its pixels.
    basis : ndarray, shape (pairs, terms)
        Sums of the fit's terms over them.
    """

    cell: Whole
    circle: Whole
    count: Floats
    basis: Floats


@dataclass(frozen=True, slots=True, eq=False)
class CleanField:
    """Means over cells without the rings.

    Attributes
    ----------
    means : ndarray, shape (slices, cells)
        Of the pixels that count.
    basis : ndarray, shape (slices, cells, terms)
        Of the fit's terms over the same pixels.
    blocks : ndarray, shape (blocks, cells)
        What the departures of each block of circles, averaged over slices, add to the means.
    """

    means: Floats
    basis: Floats
    blocks: Floats


def clean_field(circles: list[Circles], sums: list[Floats], cells: int) -> CleanField:
    """Return the cells' means without circles that stand out of a smooth course.

    Parameters
    ----------
    circles : list of Circles
        Slice by slice.
    sums : list of ndarray, each of shape (pairs,)
        Sums of the values over the same pairs.
    cells : int
        Number of cells.

    Notes
    -----
    A ring is a narrow departure of a circle's mean, over all slices, from a fit to the cells and
    from the median of its neighbours. The fit is repeated with what is left: iteratively
    reweighted least squares with Tukey's biweight (A. E. Beaton and J. W. Tukey, Technometrics 16
    (1974) 147; reference from memory).
    """
    size = 1 + max(int(c.circle.max()) for c in circles)
    weight, rest = np.ones(size), np.zeros(size)
    for _ in range(ROUNDS):
        means, basis = _weighed(circles, sums, weight, cells)
        total, count = np.zeros(size), np.zeros(size)
        for of, values, mean, terms in zip(circles, sums, means, basis, strict=True):
            found, *_ = np.linalg.lstsq(terms, mean, rcond=None)
            total += np.bincount(of.circle, values - of.basis @ found, minlength=size)
            count += np.bincount(of.circle, of.count, minlength=size)
        rest = np.where(count > 0, total / np.maximum(count, 1.0), 0.0)
        weight = _weights(rest, count)
    means, basis = _weighed(circles, sums, weight, cells)
    return CleanField(means, basis, _blocks(circles, weight, rest, cells))


def _weights(rest: Floats, count: Floats) -> Floats:
    held = count > 0
    sharp = np.zeros(len(rest))
    sharp[held] = rest[held] - ndimage.median_filter(rest[held], COURSE, mode="nearest")
    unit = sharp * np.sqrt(count)
    level = math.sqrt(float(np.median(count[held])))
    scale = max(1.4826 * float(np.median(np.abs(unit[held]))), LEAST * level)
    found: Floats = np.clip(1.0 - (unit / scale / LEAVING) ** 2, 0.0, None) ** 2
    return found


def _weighed(
    circles: list[Circles], sums: list[Floats], weight: Floats, cells: int
) -> tuple[Floats, Floats]:
    """Return the weighted means over cells, of the values and of the terms."""
    means, basis = [], []
    for of, values in zip(circles, sums, strict=True):
        by = _by(of, weight, cells)
        held = np.bincount(of.cell, by * of.count, minlength=cells)
        means.append(np.bincount(of.cell, by * values, minlength=cells) / held)
        terms = [np.bincount(of.cell, by * t, minlength=cells) / held for t in of.basis.T]
        basis.append(np.stack(terms, axis=1))
    return np.array(means), np.array(basis)


def _by(of: Circles, weight: Floats, cells: int) -> Floats:
    """Return the weight of each pair; 1 in cells of which rings leave too little."""
    every = np.bincount(of.cell, of.count, minlength=cells)
    left = np.bincount(of.cell, weight[of.circle] * of.count, minlength=cells)
    found: Floats = np.where((left < LEAST_LEFT * every)[of.cell], 1.0, weight[of.circle])
    return found


def _blocks(circles: list[Circles], weight: Floats, rest: Floats, cells: int) -> Floats:
    number = (len(rest) + BLOCK - 1) // BLOCK
    found = np.zeros((number, cells))
    for of in circles:
        by = _by(of, weight, cells) * of.count
        held = np.bincount(of.cell, by, minlength=cells)
        label = (of.circle // BLOCK) * cells + of.cell
        added = np.bincount(label, by * rest[of.circle], minlength=number * cells)
        found += added.reshape(number, cells) / held
    return found / len(circles)
