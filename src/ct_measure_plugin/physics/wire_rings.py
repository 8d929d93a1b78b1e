"""Which area each pixel stands for, when pixels of many slices are sorted by their radius."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.wire_transform import Section

    Floats = NDArray[np.float64]

__all__ = ["ring_areas"]

#: How far beyond what is transformed sums are exact, in steps of the smooth functions.
_BEYOND = 3


def ring_areas(sections: list[Section], step: float) -> list[Floats]:
    """Return the area of the ring that each pixel stands for among all slices' pixels.

    Parameters
    ----------
    sections : list of Section
        One a slice.
    step : float
        Length over which the integrand is smooth, mm.

    Notes
    -----
    Pixels sorted by radius; each shares the ring that reaches half-way to the neighbouring pairs.
    Few and uneven radii near the centre would leave errors of percents; so these areas are changed,
    as little as may be in relation to their size, until sums of cubic splines of the radius with
    knots a step apart are their integrals.
    """
    radius = np.concatenate([s.radius.ravel() for s in sections])
    area = _shared(radius)
    count = math.ceil(sections[0].reach / step) + _BEYOND
    near = radius < (count + 2) * step
    columns = _splines(radius[near] / step, count)
    wanted = 2 * math.pi * step**2 * _moments(count)
    weighed = columns * area[near]
    mix = np.linalg.lstsq(weighed @ columns.T, wanted - weighed.sum(axis=1), rcond=1e-4)[0]
    area[near] *= 1 + mix @ columns
    shape = sections[0].value.shape
    return [part.reshape(shape) for part in np.split(area, len(sections))]


def _shared(radius: Floats) -> Floats:
    order = np.argsort(radius, kind="stable")
    pairs = len(order) // 2
    square = (math.pi * radius[order[: 2 * pairs]] ** 2).reshape(pairs, 2)
    border = np.concatenate([[0.0], (square[1:, 0] + square[:-1, 1]) / 2, [square[-1, 1]]])
    area = np.zeros(len(order))
    area[order[: 2 * pairs]] = np.repeat(np.diff(border) / 2, 2)
    return area


def _cubic(x: Floats) -> Floats:
    """Return the cubic B-spline with knots at whole numbers, centred at 0."""
    a = np.abs(x)
    inner, outer = 2 / 3 - a * a + a**3 / 2, np.maximum(2 - a, 0.0) ** 3 / 6
    found: Floats = np.where(a < 1, inner, outer)
    return found


def _splines(x: Floats, count: int) -> Floats:
    """Return even cubic splines about 0, 1, ... of x, shape (count + 1, n)."""
    place = np.arange(count + 1)[:, None]
    found: Floats = _cubic(x - place) + np.where(place > 0, _cubic(x + place), 0.0)
    return found


def _moments(count: int) -> Floats:
    """Return the integrals of these splines times x, from 0 on: exact by three Gauss nodes."""
    nodes, weights = np.polynomial.legendre.leggauss(3)
    x = (np.arange(count + 2)[:, None] + (nodes + 1) / 2).ravel()
    found: Floats = _splines(x, count) @ (x * np.tile(weights / 2, count + 2))
    return found
