"""Edge regions against the centre region, and what noise alone would make of it."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.results import Quantity

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["Differences", "differences"]

#: Draws fix a standard deviation to 1 %.
DRAWS = 5000
SEED = 4

#: HU of vacuum below those of water, by definition.
WATER_TO_VACUUM = 1000.0


@dataclass(frozen=True, slots=True)
class Differences:
    """What the regions' means say.

    Attributes
    ----------
    deviation, by_chance, cupping : Quantity
        Largest absolute difference from the centre; what noise makes of it; mean difference.
    cupping_percent, integral : Quantity or None
        On the attenuation's scale, in percent; None unless the values are HU.
    """

    deviation: Quantity
    by_chance: Quantity
    cupping: Quantity
    cupping_percent: Quantity | None
    integral: Quantity | None


def differences(
    edges: Floats, centre: float, edge_error: float, centre_error: float, unit: str
) -> Differences:
    """Return the differences of regions whose means have these standard errors.

    Parameters
    ----------
    edges : ndarray, shape (n,)
        Means of the edge regions.
    centre : float
        Mean of the centre region.
    edge_error, centre_error : float
        Standard error of one of them.
    unit : str
        Of the means.

    Notes
    -----
    The uncertainties of a largest difference and of a ratio are standard deviations over the same
    5,000 drawn sets of means (JCGM 101:2008). The largest of n differences is above 0 for a
    perfect phantom too: `by_chance` says how far.

    Examples
    --------
    >>> found = differences(np.array([2.0, 1.0, -3.0, 0.0]), 0.0, 0.1, 0.1, "HU")
    >>> print(found.deviation, "|", found.by_chance, "|", found.cupping)
    3.00 ± 0.14 HU | 0.192 ± 0.082 HU | 0.00 ± 0.11 HU
    """
    n = len(edges)
    draws = _draws(n + 1)
    around, middle = edge_error * draws[:, :n], centre_error * draws[:, n]
    chance = np.abs(around - middle[:, None]).max(axis=1)
    drawn = np.concatenate([edges + around, (centre + middle)[:, None]], axis=1)
    spread = np.abs(drawn[:, :n] - drawn[:, n:]).max(axis=1)
    cup = float(edges.mean() - centre)
    cup_error = float(np.hypot(edge_error / np.sqrt(n), centre_error))
    percent = integral = None
    if unit == "HU":
        scale = float(edges.mean()) + WATER_TO_VACUUM
        percent = Quantity(100.0 * cup / scale, "%", 100.0 * cup_error / scale)
        values = _integral(np.append(edges, centre)[None])
        integral = Quantity(float(values[0]), "%", float(_integral(drawn).std()))
    return Differences(
        Quantity(float(np.abs(edges - centre).max()), unit, float(spread.std())),
        Quantity(float(chance.mean()), unit, float(chance.std())),
        Quantity(cup, unit, cup_error),
        percent,
        integral,
    )


@cache
def _draws(count: int) -> Floats:
    return np.random.default_rng(SEED).standard_normal((DRAWS, count))


def _integral(means: Floats) -> Floats:
    high, low = means.max(axis=1), means.min(axis=1)
    found: Floats = 100.0 * (high - low) / (high + low + 2.0 * WATER_TO_VACUUM)
    return found
