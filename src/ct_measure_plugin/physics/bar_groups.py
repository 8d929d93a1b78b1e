"""One group of bars: its power without noise, and whether it can be trusted."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.results import Caution

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["Group", "NoiseFacts", "measured_group"]

#: Fewest periods across a box.
LEAST_PERIODS = 4.0

#: Share of the pixels' Nyquist frequency beyond which bars along the grid beat with it.
MOST_OF_NYQUIST = 0.8


@dataclass(frozen=True, slots=True)
class Group:
    """A group's frequency, its variance less the noise's, and that one's standard uncertainty."""

    frequency: float
    power: float
    doubt: float


@dataclass(frozen=True, slots=True)
class NoiseFacts:
    """The noise's variance, its standard uncertainty, and independent pixels a pixel."""

    variance: float
    doubt: float
    independence: float


def measured_group(
    box: Floats,
    frequency: float,
    steps: tuple[float, float],
    noise: NoiseFacts,
    half: float,
) -> Group | Caution:
    """Return the power of a group's bars, or why it is left out.

    Parameters
    ----------
    box : ndarray, shape (ny, nx)
        Pixels within the group.
    frequency : float
        Bar pairs a mm.
    steps : (float, float)
        dy, dx.
    noise : NoiseFacts
        From the uniform boxes.
    half : float
        Half the contrast between bar and background.
    """
    ny, nx = box.shape
    dy, dx = steps
    taper = np.hanning(ny + 2)[1:-1, None] * np.hanning(nx + 2)[None, 1:-1]
    taper = taper / taper.sum()
    mean = float(np.sum(taper * box))
    left = box - mean
    direction = _direction(left * taper, frequency, steps)
    periods = frequency * (abs(direction[0]) * ny * dy + abs(direction[1]) * nx * dx)
    if periods < LEAST_PERIODS:
        return Caution(
            "few-pixels",
            f"The box on {frequency:g} bar pairs a mm holds {periods:.1f} periods and was left out;"
            f" {LEAST_PERIODS:g} are needed.",
            "Draw it over more bars.",
        )
    along = max(abs(direction[0]) * dy, abs(direction[1]) * dx) * frequency
    slanted = min(abs(direction[0]) * ny * dy, abs(direction[1]) * nx * dx) * frequency
    if along > 0.5 * MOST_OF_NYQUIST and slanted < 1.0:
        return Caution(
            "aliasing",
            f"The bars of {frequency:g} pairs a mm run along the pixel grid near its Nyquist"
            " frequency, where their SD depends on where they lie; the group was left out.",
            "Turn the pattern by some degrees, or reconstruct with smaller pixels.",
        )
    effective = noise.independence / float(np.sum(taper**2))
    square = float(np.sum(taper * left**2)) - noise.variance * (1 - 1 / effective)
    # the noise's own scatter, and its product with the bars
    scatter = 2 * noise.variance**2 + 4 * max(square, 0.0) * noise.variance
    doubt = math.hypot(math.sqrt(scatter / effective), noise.doubt, 1e-4 * half**2)
    return Group(frequency, square, doubt)


def _direction(
    tapered: Floats, frequency: float, steps: tuple[float, float]
) -> tuple[float, float]:
    """Return the unit vector (y, x) across the bars.

    The direction, every 2°, in which a wave of the frequency explains most.
    """
    ny, nx = tapered.shape
    y, x = np.arange(ny) * steps[0], np.arange(nx) * steps[1]
    best: tuple[float, tuple[float, float]] = (-1.0, (0.0, 1.0))
    for angle in np.radians(np.arange(0, 180, 2)).tolist():
        cy, cx = math.sin(angle), math.cos(angle)
        rows = np.exp(-2j * math.pi * frequency * cy * y)
        columns = np.exp(-2j * math.pi * frequency * cx * x)
        amplitude = abs(complex(rows @ tapered @ columns))
        best = max(best, (amplitude, (cy, cx)))
    return best[1]
