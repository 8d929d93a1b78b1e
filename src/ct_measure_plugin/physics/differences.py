"""Two answers to one question: number by number, the second less the first."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.noise_correlation import doubt_of_mean
from ct_measure_plugin.physics.quantisation import resolution_of, rounding_of_mean
from ct_measure_plugin.physics.results import Quantity, quantities_of

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.results import Result

    Floats = NDArray[np.float64]

__all__ = ["differences", "paired_mean"]


def differences(first: Result, second: Result) -> dict[str, Quantity]:
    """Return the second answer's Quantities less the first's, by field name.

    Parameters
    ----------
    first, second : Result
        Of one measurement. Numbers that only one of them has, or that have another unit, are left
        out.

    Notes
    -----
    The answers are taken as independent: u² = u₁² + u₂² (JCGM 100:2008, 5.1.2); None if either
    states no uncertainty. What the two have in common makes the true uncertainty smaller.

    Examples
    --------
    >>> from ct_measure_plugin.physics import region_statistics
    >>> image = np.random.default_rng(1).normal(40, 5, (30, 30))
    >>> one, other = (region_statistics(image + x, spacing_mm=(1, 1)) for x in (0, 7))
    >>> found = differences(one, other)
    >>> round(found["mean"].value, 9), round(found["sd"].value, 9)
    (7.0, 0.0)
    """
    if type(first) is not type(second):
        raise ArgumentError(
            "second", f"must be of the first's type {type(first).__name__}", type(second).__name__
        )
    before, after = quantities_of(first), quantities_of(second)
    found = {}
    for name, one in before.items():
        other = after.get(name)
        if other is None or other.unit != one.unit:
            continue
        u = None
        if one.uncertainty is not None and other.uncertainty is not None:
            u = math.hypot(one.uncertainty, other.uncertainty)
        found[name] = Quantity(other.value - one.value, one.unit, u)
    return found


def paired_mean(
    first: Floats,
    second: Floats,
    weights: Floats,
    *,
    spacing_mm: tuple[float, ...],
    unit: str = "HU",
) -> Quantity:
    """Return the difference of two means over the same pixels, from their pixel differences.

    Parameters
    ----------
    first, second : ndarray, shape (ny, nx) or (nz, ny, nx)
        The values of two scans on one grid.
    weights : ndarray of the same shape
        The coverage, 0 where a pixel was left out of either.
    spacing_mm : tuple of float
        Step along each axis.
    unit : str
        Unit of the values.

    Returns
    -------
    Quantity
        Second less first, with the standard error of the pixel differences: the object's own
        structure and noise that both share cancel, as in two kernels on the same data.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> scene = rng.normal(0, 300, (40, 40))  # structure that both scans show
    >>> one, other = (scene + rng.normal(level, 10, (40, 40)) for level in (0, 5))
    >>> found = paired_mean(one, other, np.ones((40, 40)), spacing_mm=(1.0, 1.0))
    >>> bool(found.uncertainty < 0.5), bool(abs(found.value - 5) < 3 * found.uncertainty)
    (True, True)
    """
    if not first.shape == second.shape == weights.shape:
        raise ArgumentError("second", f"must have the first's shape {first.shape}", second.shape)
    inside = weights > 0
    change = np.where(inside, second - first, 0.0)
    total, squares = float(weights.sum()), float(np.sum(weights * weights))
    mean = float(np.sum(weights * change)) / total
    power = float(np.sum(weights * np.where(inside, change - mean, 0.0) ** 2))
    sd = math.sqrt(power / max(total - squares / total, 1e-300))
    error = math.sqrt(doubt_of_mean(change, weights, spacing_mm).variance_of_mean)
    step = resolution_of(change[inside])
    # each of the two was rounded; their difference is known to a step of both
    return Quantity(mean, unit, math.hypot(error, math.sqrt(2.0) * rounding_of_mean(sd, step)))
