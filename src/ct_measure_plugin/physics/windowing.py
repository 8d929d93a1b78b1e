"""Display windows: grey values from CT numbers by centre and width (DICOM PS3.3, C.11.2.1.2).

Windowing is for the eye. It changes no CT number, and nothing here is ever measured on.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Literal, TypeAlias

import numpy as np

from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

__all__ = [
    "FUNCTIONS",
    "SIGMOID_REACH",
    "WindowFunction",
    "check_window",
    "limits_of",
    "sigmoid_ramp",
    "window_of",
    "window_of_spread",
    "windowed",
]

WindowFunction: TypeAlias = Literal["LINEAR", "LINEAR_EXACT", "SIGMOID"]

FUNCTIONS: tuple[WindowFunction, ...] = ("LINEAR", "LINEAR_EXACT", "SIGMOID")

#: How many widths either side of the centre a sigmoid is drawn. Beyond, it differs from black or
#: white by less than 1 / (1 + exp(8)) = 0.034 % of the grey scale, under a tenth of an 8-bit step.
SIGMOID_REACH = 2.0

#: Half-width of the ramp that stands for the step of LINEAR with width 1. The step lies midway
#: between two whole numbers, so whole CT numbers are shown exactly.
_STEP = 0.005


def check_window(centre: float, width: float, function: WindowFunction = "LINEAR") -> None:
    """Raise if a centre and width make no window.

    Parameters
    ----------
    centre, width : float
        In the unit of the values.
    function : {"LINEAR", "LINEAR_EXACT", "SIGMOID"}
        How they are meant.

    Raises
    ------
    ArgumentError
        If the function is unknown, a number is not finite, the width is below 1 (LINEAR) or not
        above 0 (the others).
    """
    if function not in FUNCTIONS:
        raise ArgumentError("function", f"must be one of {', '.join(FUNCTIONS)}", function)
    if not math.isfinite(centre):
        raise ArgumentError("centre", "must be finite", centre)
    if not math.isfinite(width) or width <= 0:
        raise ArgumentError("width", "must be finite and greater than 0", width)
    if function == "LINEAR" and width < 1:
        raise ArgumentError("width", "must be at least 1 for LINEAR", width)


def windowed(
    values: ArrayLike,
    centre: float,
    width: float,
    *,
    function: WindowFunction = "LINEAR",
    grey: tuple[float, float] = (0.0, 255.0),
) -> NDArray[np.float64]:
    """Return the grey values of CT numbers under a window.

    Parameters
    ----------
    values : array of any shape
        CT numbers, HU as a rule.
    centre, width : float
        In the unit of the values.
    function : {"LINEAR", "LINEAR_EXACT", "SIGMOID"}
        How they are meant.
    grey : (float, float)
        Darkest and brightest grey.

    Returns
    -------
    ndarray of the same shape
        Grey values, not rounded.

    Raises
    ------
    ArgumentError
        If there is no such window.

    Notes
    -----
    DICOM PS3.3, C.11.2.1.2.1 (LINEAR), C.11.2.1.3.1 (SIGMOID), C.11.2.1.3.2 (LINEAR_EXACT).

    Examples
    --------
    >>> [round(float(windowed(0, 40, 400, function=f)), 4) for f in FUNCTIONS]
    [102.2556, 102.0, 102.3346]
    """
    check_window(centre, width, function)
    x = np.asarray(values, dtype=float)
    if function == "SIGMOID":
        share = _logistic(4.0 * (x - centre) / width)
    elif function == "LINEAR" and width == 1:
        share = np.where(x <= centre - 0.5, 0.0, 1.0)
    elif function == "LINEAR":
        share = np.clip((x - (centre - 0.5)) / (width - 1.0) + 0.5, 0.0, 1.0)
    else:
        share = np.clip((x - centre) / width + 0.5, 0.0, 1.0)
    return np.asarray(grey[0] + share * (grey[1] - grey[0]))


def _logistic(t: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return 1 / (1 + exp(-t)) without overflow."""
    small = np.exp(-np.abs(t))
    return np.where(t >= 0, 1.0, small) / (1.0 + small)


def limits_of(
    centre: float, width: float, function: WindowFunction = "LINEAR"
) -> tuple[float, float]:
    """Return the two values between which a viewer must spread its greys to show a window.

    For the linear functions these are the values shown black and white. A sigmoid has none; its
    limits lie :data:`SIGMOID_REACH` widths from the centre and must be filled with
    :func:`sigmoid_ramp`.

    Raises
    ------
    ArgumentError
        If there is no such window.

    Examples
    --------
    >>> limits_of(40, 400), limits_of(40, 400, "LINEAR_EXACT"), limits_of(40, 400, "SIGMOID")
    ((-160.0, 239.0), (-160.0, 240.0), (-760.0, 840.0))
    """
    check_window(centre, width, function)
    if function == "SIGMOID":
        reach = SIGMOID_REACH * width
        return centre - reach, centre + reach
    if function == "LINEAR_EXACT":
        return centre - width / 2, centre + width / 2
    half = max((width - 1) / 2, _STEP)
    return centre - 0.5 - half, centre - 0.5 + half


def window_of(low: float, high: float, function: WindowFunction = "LINEAR") -> tuple[float, float]:
    """Return the centre and width whose limits are `low` and `high`: :func:`limits_of` backwards.

    Raises
    ------
    ArgumentError
        If the limits are not finite and increasing, or the function is unknown.

    Examples
    --------
    >>> window_of(-160, 239), window_of(-160, 240, "LINEAR_EXACT"), window_of(-760, 840, "SIGMOID")
    ((40.0, 400.0), (40.0, 400.0), (40.0, 400.0))
    """
    if not (math.isfinite(low) and math.isfinite(high) and low < high):
        raise ArgumentError("limits", "must be finite, the low one first", (low, high))
    middle, distance = (low + high) / 2, float(high) - low
    if function == "LINEAR":
        narrowest = distance <= 2 * _STEP * (1 + 1e-6)
        return middle + 0.5, 1.0 if narrowest else distance + 1.0
    if function == "LINEAR_EXACT":
        return middle, distance
    check_window(middle, distance, function)
    return middle, distance / (2 * SIGMOID_REACH)


def window_of_spread(mean: float, sd: float, *, k: float = 2.0) -> tuple[float, float]:
    """Return the centre and width that spread the greys over mean ± k SD.

    The width is at least 1, so that a region without noise gives a window too.

    Raises
    ------
    ArgumentError
        If `sd` is negative or `k` not above 0.

    Examples
    --------
    >>> window_of_spread(12.0, 10.0, k=3)
    (12.0, 60.0)
    """
    if not k > 0:
        raise ArgumentError("k", "must be greater than 0", k)
    if not sd >= 0:
        raise ArgumentError("sd", "must not be negative", sd)
    return float(mean), max(2.0 * k * float(sd), 1.0)


def sigmoid_ramp(samples: int = 1025) -> NDArray[np.float64]:
    """Return the share of grey along a sigmoid window's limits, shape (samples,), 0 to 1.

    Examples
    --------
    >>> ramp = sigmoid_ramp()
    >>> float(ramp[512]), round(float(ramp[640]), 6)
    (0.5, 0.880797)
    """
    if samples < 2:
        raise ArgumentError("samples", "must be at least 2", samples)
    along = np.linspace(-SIGMOID_REACH, SIGMOID_REACH, samples)
    return _logistic(4.0 * along)
