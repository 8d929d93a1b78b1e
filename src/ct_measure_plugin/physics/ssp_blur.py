"""What the object and the resolution within the slice add to a slice profile."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["FWHM", "SHARP", "Blur"]

#: FWHM of a Gaussian over its SD.
FWHM = 2 * math.sqrt(2 * math.log(2))

#: Relative standard uncertainty of the resolution in the slice, for which a Gaussian stands.
DOUBTED = 0.1

#: Layers into which a bead is cut, and one that climbs, which is thinner; SD of the Gaussian that
#: stands for each, in layers.
LAYERS, CLIMBING, SOFT = 12, 6, 0.45


@dataclass(frozen=True, slots=True, eq=False)
class Blur:
    """What widens a profile besides the slice: a sum of equal Gaussians along z.

    Attributes
    ----------
    places, weights : ndarray, shape (k,)
        Where they stand, mm, and what each holds, 1 in all.
    sigma : float
        SD of each, mm.
    within : float
        The part of `sigma` that the resolution within the slice has, mm.
    """

    places: Floats
    weights: Floats
    sigma: float
    within: float = 0.0

    @classmethod
    def of(cls, target: str, size: float, tangent: float = 0.0, in_plane: float = 0.0) -> Blur:
        """Return that of a bead, ramp or wire.

        A bead is cut into layers of the volume of a sphere's, a ramp of thickness t into layers of
        a plate of the extent ``t / cos θ`` along z, a wire into those of a cylinder; the variance
        is kept. The resolution within the slice, of the FWHM `in_plane`, adds a Gaussian of
        ``in_plane tan θ``.

        >>> plate = Blur.of("ramp", 0.3, 1.0)
        >>> variance = plate.weights @ plate.places**2 + plate.sigma**2
        >>> round(float(np.sqrt(12 * variance)), 4), round(0.3 * 2**0.5, 4)
        (0.4243, 0.4243)
        """
        within = in_plane / FWHM * tangent
        half = size * math.hypot(1.0, tangent) / 2
        if half == 0:
            return cls(np.zeros(1), np.ones(1), within, within)
        count = LAYERS if target == "bead" else CLIMBING
        ends = np.linspace(-1, 1, count + 1)
        below, variance = {
            "bead": ((3 * ends - ends**3) / 4, 1 / 5),
            "wire": ((ends * np.sqrt(1 - ends**2) + np.arcsin(ends)) / math.pi, 1 / 4),
            "ramp": (ends / 2, 1 / 3),
        }[target]
        weights, sigma = np.diff(below), SOFT * 2 / count
        places = (ends[1:] + ends[:-1]) / 2
        places *= math.sqrt((variance - sigma**2) / float(weights @ places**2))
        return cls(places * half, weights, math.hypot(sigma * half, within), within)

    def wider(self, variance: float) -> Blur:
        """Return this with a further variance, mm²."""
        return replace(self, sigma=math.sqrt(self.sigma**2 + variance))

    def doubted(self) -> Blur:
        """Return this with a resolution in the slice that is lower by its standard uncertainty."""
        return self.wider(self.within**2 * ((1 - DOUBTED) ** 2 - 1))

    @property
    def variance(self) -> float:
        """What it adds to a profile's, mm²."""
        return float(self.weights @ self.places**2) + self.sigma**2


#: Nothing.
SHARP = Blur(np.zeros(1), np.ones(1), 0.0)
