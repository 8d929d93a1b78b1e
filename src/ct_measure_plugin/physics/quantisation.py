"""What whole-number storage leaves uncertain.

A CT number is stored in steps, so each true value lies anywhere within half a step of the stored
one: a rectangular distribution of standard deviation step/√12 [1]_. A number read off single
values, such as a percentile, keeps that uncertainty. A mean loses it where the noise dithers:
rounding a Gaussian of standard deviation σ shifts its mean by (q/π) Σ (-1)^k/k sin(2πkμ/q)
exp(-2π²k²σ²/q²), whose root mean square over all μ is q sqrt(Σ exp(-4π²k²σ²/q²)/(2π²k²)): q/√12
without noise, 0.002 q at σ = q/2. [2]_

References
----------
.. [1] JCGM 100:2008, F.2.2.1: the resolution of a digital indication.
.. [2] B. Widrow, I. Kollár, Quantization Noise, Cambridge University Press 2008 (the series of a
   rounded variable's moments; cited from memory, and checked by the tests).
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = ["resolution_of", "rounding_of_mean", "rounding_of_spread", "single_value"]

_K = np.arange(1.0, 201.0)


def resolution_of(values: NDArray[np.float64]) -> float:
    """Return the step in which values are stored: 1 if all are whole numbers, else 0.

    >>> resolution_of(np.array([3.0, -7.0])), resolution_of(np.array([3.0, 0.5]))
    (1.0, 0.0)
    """
    return 1.0 if bool(np.all(np.rint(values) == values)) else 0.0


def single_value(step: float) -> float:
    """Return the standard uncertainty of one stored value, step/√12."""
    return step / math.sqrt(12.0)


def rounding_of_mean(sd: float, step: float) -> float:
    """Return the standard uncertainty that rounding leaves in a mean.

    Parameters
    ----------
    sd : float
        Standard deviation of the stored values.
    step : float
        Distance of stored values; 0 for values that are not rounded.

    Examples
    --------
    >>> round(rounding_of_mean(0.0, 1.0), 3), rounding_of_mean(12.0, 1.0) < 1e-12
    (0.289, True)
    """
    if step <= 0:
        return 0.0
    square = (sd / step) ** 2 - 1 / 12  # of the noise before rounding, by Sheppard's correction
    if square <= 0:
        return single_value(step)
    if square > 4:
        return 0.0
    terms = np.exp(-((2 * math.pi * _K) ** 2) * square) / (2 * (math.pi * _K) ** 2)
    return step * math.sqrt(float(terms.sum()))


def rounding_of_spread(spread: float, step: float) -> float:
    """Return the standard uncertainty that rounding leaves in an SD or a mean deviation.

    Rounding adds step²/12 to a variance on average. The stored values' spread is stated as it is,
    and what Sheppard's correction would take off it counts as doubt: step²/24s for a large spread
    s, and step/√12 where the spread is no larger than rounding alone makes it.

    >>> round(rounding_of_spread(0.0, 1.0), 3), round(rounding_of_spread(10.0, 1.0), 4)
    (0.289, 0.0042)
    """
    alone = single_value(step)
    return alone if spread <= alone else spread - math.sqrt(spread**2 - alone**2)
