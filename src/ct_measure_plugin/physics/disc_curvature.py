"""What its curvature does to the edge of a disc, and how to take it away.

Across the edge of a disc of radius R, blurred with the line spread function L(d), the values rise
inwards by

    L(d) (1 + d / 2R) + 3 / 8R² [d² L(d) + K(d)],   K(d) = ∫ t L(t) dt up to d,

to second order in 1/R: the Hankel transform ``2πR ∫ M(f) 2πf J1(2πRf) J1(2πrf) df`` with the Bessel
functions' asymptotic series (Abramowitz and Stegun 1964, 9.2.5). For a Gaussian this is an edge
that lies sigma² / 2R further inwards and is blurred by (sigma / R)² / 4 more.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.edge_line import RoughEsf

    Floats = NDArray[np.float64]

__all__ = ["Curvature", "curvature_of"]


@dataclass(frozen=True, slots=True, eq=False)
class Curvature:
    """The difference between the edge of a disc and a straight one.

    Attributes
    ----------
    shift : float
        How far inwards of the true edge a least-squares circle lies, mm.
    grid, excess : ndarray, shape (n,)
        Distance inwards from that circle, mm, and what the disc's edge has there more than a
        straight edge, in the values' unit.
    """

    shift: float
    grid: Floats
    excess: Floats

    def at(self, distance: Floats) -> Floats:
        """Return the excess at distances inwards from the circle; 0 far from it."""
        found: Floats = np.interp(distance, self.grid, self.excess, left=0.0, right=0.0)
        return found


def curvature_of(rough: RoughEsf, radius: float) -> Curvature:
    """Return what curvature does to an edge of this shape at the border of a disc.

    Examples
    --------
    >>> from ct_measure_plugin.physics.edge_line import RoughEsf
    >>> d = np.linspace(-6.0, 6.0, 2401)
    >>> line = np.exp(-0.5 * (d / 0.6) ** 2) / (0.6 * np.sqrt(2 * np.pi))
    >>> round(curvature_of(RoughEsf(0.6, d, 0 * d, line), 10.0).shift, 5)  # sigma² / 2R
    0.018
    """
    d = rough.grid
    step = float(d[1] - d[0])
    line = (rough.line + rough.line[::-1]) / 2
    total = float(line.sum()) * step
    if total == 0:
        return Curvature(0.0, d, np.zeros_like(d))
    line = line / total
    moment = _running(d * line, step)
    power = float(line @ line) * step
    shift = -float(moment @ line) * step / (2 * radius * power)
    first = moment / (2 * radius) + shift * line
    second = 3 / (8 * radius**2) * _running(d * d * line + moment, step)
    second += shift**2 / 2 * np.gradient(line, step) + shift * d * line / (2 * radius)
    return Curvature(shift, d, total * (first + second))


def _running(values: Floats, step: float) -> Floats:
    """Return the integral from the start up to each point, by trapezia."""
    found: Floats = (np.cumsum(values) - values / 2) * step
    return found
