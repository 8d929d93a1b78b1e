"""What a profile shows: the width of its edge or of its peak, with uncertainties."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import special

from ct_measure_plugin.physics.results import NotMeasured, Quantity

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["Ends", "Peak", "crossings", "edge_width", "ends_of", "peak_width"]

#: Chance at which noise alone may pass for a step or peak at one point of a profile: 4 standard
#: deviations where the noise is well known, more (by Student's t) where short ends tell it.
FALSE_ALARM = 3e-5
MOST_FACTOR = 12.0

#: Edges: share of the profile at either end that is plateau. Peaks: share that is background.
PLATEAU, BACKGROUND = 0.2, 0.15


@dataclass(frozen=True, slots=True)
class Ends:
    """The two ends of a profile.

    Attributes
    ----------
    low, high : float
        Medians of the first and of the last part.
    noise : float
        SD of the profile's points about a straight line, pooled over both ends.
    doubt : float
        Standard uncertainty of each median.
    correlation : float
        Length over which the noise is correlated, mm.
    freedom : float
        Independent points behind `noise`.
    """

    low: float
    high: float
    noise: float
    doubt: float
    correlation: float
    freedom: float

    @property
    def least(self) -> float:
        """What a step or peak has to exceed to stand out from the noise."""
        factor = float(special.stdtrit(self.freedom, 1 - FALSE_ALARM))
        return min(factor, MOST_FACTOR) * self.noise


def ends_of(distance: Floats, profile: Floats, share: float, pixel: float) -> Ends:
    """Return the ends of a profile; its noise is correlated over a pixel at least."""
    length = share * float(distance[-1])
    parts = [distance <= length, distance >= distance[-1] - length]
    left = [_detrended(distance[part], profile[part]) for part in parts]
    correlation = max(_correlation(left) * float(distance[1]), pixel)
    independent = max(length / correlation, 1.0)
    # a straight line took two of them away
    freedom = max(independent - 2, 0.5)
    noise = math.sqrt(float(np.mean(np.concatenate(left) ** 2)) * independent / freedom)
    # the median of Gaussian noise scatters by sqrt(π/2) more than the mean
    doubt = noise * math.sqrt(math.pi / 2 / independent)
    low, high = (float(np.median(profile[part])) for part in parts)
    return Ends(low, high, noise, doubt, correlation, 2 * freedom)


def _detrended(x: Floats, y: Floats) -> Floats:
    if len(x) < 4:
        return np.asarray(y - y.mean())
    line = np.polynomial.polynomial.polyfit(x - x.mean(), y, 1)
    found: Floats = y - np.polynomial.polynomial.polyval(x - x.mean(), line)
    return found


def _correlation(parts: list[Floats]) -> float:
    """Return the correlation length in samples: 1 + 2 Σ ρ up to the first zero of ρ."""
    zero = sum(float(p @ p) for p in parts)
    total, least = 1.0, min(len(p) for p in parts)
    for k in range(1, least):
        rho = sum(float(p[:-k] @ p[k:]) for p in parts) / zero if zero > 0 else 0.0
        if rho <= 0:
            break
        total += 2 * rho
    return total


def crossings(distance: Floats, profile: Floats, level: float) -> tuple[Floats, Floats]:
    """Return where a profile crosses a level, by linear interpolation, and its slopes there."""
    above = profile >= level
    i = np.flatnonzero(above[1:] != above[:-1])
    step = distance[i + 1] - distance[i]
    slope = (profile[i + 1] - profile[i]) / step
    return distance[i] + (level - profile[i]) / slope, slope


def edge_width(
    distance: Floats, profile: Floats, ends: Ends, shares: tuple[float, float] = (0.1, 0.9)
) -> Quantity | NotMeasured:
    """Return the distance over which an edge goes from one share of its step to another."""
    step = ends.high - ends.low
    if abs(step) < ends.least or step == 0:
        return NotMeasured(
            f"the ends of the profile differ by {abs(step):.3g}, which does not stand out from its"
            f" noise of {ends.noise:.2g}",
            "draw it across an edge, or average over a width",
        )
    unit = (profile - ends.low) / step
    places, variance = [], 0.0
    # from the middle outwards, so that noise on a plateau is not taken for the edge
    at_half, _ = crossings(distance, unit, 0.5)
    if len(at_half) == 0:
        return NotMeasured("the profile does not cross the middle of its step", "draw it longer")
    middle = float(np.median(at_half))
    for share in shares:
        at, slope = crossings(distance, unit, share)
        rising = slope > 0
        side = at <= middle if share < 0.5 else at >= middle
        at, slope = at[rising & side], slope[rising & side]
        if len(at) == 0:
            return NotMeasured(
                f"the profile does not cross {100 * share:g} % of its step on one side of the edge",
                "draw it longer, so that both ends lie on plateaus",
            )
        nearest = int(np.argmin(np.abs(at - middle)))
        places.append(float(at[nearest]))
        doubt = math.hypot(ends.noise, (1 - share) * ends.doubt, share * ends.doubt) / abs(step)
        variance += (doubt / _steady(distance, unit, places[-1], float(slope[nearest]))) ** 2
    return Quantity(abs(places[1] - places[0]), "mm", math.sqrt(variance))


def _steady(distance: Floats, profile: Floats, at: float, slope: float) -> float:
    """Return the slope at a crossing over a sixth of the profile's own rise, less noisy."""
    reach = 0.08 / abs(slope)
    near = np.interp([at - reach, at + reach], distance, profile)
    chord = abs(float(near[1] - near[0])) / (2 * reach)
    return max(chord, 0.2 * abs(slope))


@dataclass(frozen=True, slots=True)
class Peak:
    """A peak: width at a share of its height, height over the background, middle of the width."""

    width: Quantity
    height: Quantity
    middle: Quantity


def peak_width(
    distance: Floats,
    profile: Floats,
    ends: Ends,
    unit: str,
    share: float = 0.5,
    *,
    summit: float = 0.85,
) -> Peak | NotMeasured:
    """Return the full width, at a share of its height, of the peak or trough between equal ends.

    The background is the mean of both ends, the top a parabola through the points above the share
    `summit` of the highest one.
    """
    base = (ends.low + ends.high) / 2
    i = int(np.argmax(np.abs(profile - base)))
    height = float(profile[i]) - base
    if abs(height) < ends.least or height == 0:
        return NotMeasured(
            f"no peak stands out from the noise of {ends.noise:.2g}",
            "draw the profile across a peak, or average over a width",
        )
    if abs(ends.high - ends.low) > max(0.2 * abs(height), ends.least):
        return NotMeasured(
            f"the ends of the profile differ by {abs(ends.high - ends.low):.3g}: it shows a step",
            "draw it from background to background",
        )
    height, top = _top(distance, profile - base, i, summit)
    at, slope = crossings(distance, profile - base, share * height)
    left = at[at < top]
    if len(left) == 0 or len(left) == len(at):
        return NotMeasured("the peak reaches an end of the profile", "draw it longer")
    last, first = len(left) - 1, len(left)  # the crossings next to the top
    width, middle = float(at[first] - at[last]), float(at[first] + at[last]) / 2
    steep = np.abs(slope[[last, first]])
    crossing = float(np.sum((ends.noise / steep) ** 2))
    floor = ends.doubt / math.sqrt(2)
    crown = 1.03 * math.sqrt(1 - summit) * width  # of a Gaussian, above the summit's share
    peak = ends.noise * math.sqrt(min(1.0, 2 * ends.correlation / crown))
    level = math.hypot(share * peak, (1 - share) * floor) * float(np.sum(1 / steep))
    return Peak(
        Quantity(width, "mm", math.hypot(math.sqrt(crossing), level)),
        Quantity(height, unit, math.hypot(peak, floor)),
        Quantity(middle, "mm", math.sqrt(crossing) / 2),
    )


def _top(distance: Floats, profile: Floats, i: int, summit: float) -> tuple[float, float]:
    """Return height and place of the parabola about the highest point."""
    level = summit * profile[i]
    n = len(profile)
    low = high = i
    while low > 0 and profile[low - 1] / level > 1:
        low -= 1
    while high < n - 1 and profile[high + 1] / level > 1:
        high += 1
    if high - low < 2:
        return float(profile[i]), float(distance[i])
    x = distance[low : high + 1] - distance[i]
    c, b, a = np.polynomial.polynomial.polyfit(x, profile[low : high + 1], 2)
    if a * profile[i] >= 0 or abs(b / (2 * a)) > np.abs(x).max():
        return float(profile[i]), float(distance[i])
    return float(c - b * b / (4 * a)), float(distance[i] - b / (2 * a))
