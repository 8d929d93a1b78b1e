"""Shapes of slice profiles: two rectangles and a Gaussian, convolved, in closed form.

With one rectangle it is a box with rounded sides, with two a trapezoid (a collimation with its
penumbra) up to the triangle of linear interpolation, with neither a Gaussian. Two angles say how
the variance is shared, so that every shape, the corners among them, lies in a rectangle of them. A
wider Gaussian may hold a share of the area: the tails of a helix or a cone beam.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import special

from ct_measure_plugin.physics.ssp_blur import SHARP, Blur

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["MOST_ROUND", "MOST_SPLIT", "MOST_TAIL", "Shapes"]

#: Ends of the two angles, and of the share of the tails.
MOST_ROUND, MOST_SPLIT, MOST_TAIL = math.pi / 2, math.pi / 4, 0.3

#: SD of the tails over that of the rest.
WIDER = 2.0

#: Narrower parts, as a share of the SD of the whole, are given this width: none can be told.
SHARPEST = 1e-3

#: Halvings after which a width is interpolated, to 1e-8 of it.
HALVINGS = 14


@dataclass(frozen=True, slots=True, eq=False)
class Shapes:
    """Symmetric profiles of unit area about 0.

    Attributes
    ----------
    wide, narrow, sigma : ndarray, shape (k,)
        Widths of the two rectangles and SD of the Gaussian, mm.
    tail : ndarray, shape (k,)
        Share of the area in the tails.

    Examples
    --------
    Rectangles of 3 and 1.2 mm make a trapezoid 3 mm wide at half its height, 3 + 0.8 · 1.2 mm at a
    tenth; a Gaussian's widths are 2.3548 and 4.2919 SD:

    >>> parts = np.array([3.0, 0.0]), np.array([1.2, 0.0]), np.array([0.0, 1.0])
    >>> shapes = Shapes(*parts, tail=np.zeros(2))
    >>> shapes.widths(0.5).round(4).tolist(), shapes.widths(0.1).round(4).tolist()
    ([3.0, 2.3548], [3.96, 4.2919])
    """

    wide: Floats
    narrow: Floats
    sigma: Floats
    tail: Floats

    @classmethod
    def of_spread(cls, spread: Floats, round_off: Floats, split: Floats, tail: Floats) -> Shapes:
        """Return shapes whose parts but the tails have an SD.

        `round_off` 0 is a Gaussian, `split` 0 has one rectangle.
        """
        box = math.sqrt(12) * spread * np.sin(round_off)
        return cls(box * np.cos(split), box * np.sin(split), spread * np.cos(round_off), tail)

    @property
    def spread(self) -> Floats:
        """SD of each but for its tails."""
        found: Floats = np.sqrt((self.wide**2 + self.narrow**2) / 12 + self.sigma**2)
        return found

    def at(self, z: Floats, blur: Blur = SHARP) -> Floats:
        """Return the profiles, (k, n), at z of shape (n,) or (k, n), blurred."""
        spread = np.sqrt(self.spread**2 + blur.variance)
        soft = np.maximum(np.hypot(self.sigma, blur.sigma), SHARPEST * spread)
        least = np.maximum(SHARPEST * spread, 3 * SHARPEST * soft)
        wide, narrow = np.maximum(self.wide, least), np.maximum(self.narrow, least)
        wide, narrow, soft = wide[:, None, None], narrow[:, None, None], soft[:, None, None]
        z = np.atleast_2d(z)
        layers = _trapezoid(z[..., None] - blur.places, wide, narrow, soft)
        far = np.sqrt((WIDER * self.spread) ** 2 + blur.variance)[:, None]
        tails = np.exp(-0.5 * (z / far) ** 2) / (far * math.sqrt(2 * math.pi))
        share = self.tail[:, None]
        found: Floats = (1 - share) * (layers @ blur.weights) + share * tails
        return found

    def widths(self, share: float, blur: Blur = SHARP) -> Floats:
        """Return the full widths at a share of the height, mm, shape (k,)."""
        low = np.zeros((len(self.wide), 1))
        above = self.at(low, blur)
        level, below = share * above, np.zeros_like(low)
        reach = 3.5 * np.sqrt(self.spread**2 + blur.variance)[:, None]
        for _ in range(HALVINGS):
            reach = reach / 2
            here = self.at(low + reach, blur)
            higher = here > level
            low, above = np.where(higher, low + reach, low), np.where(higher, here, above)
            below = np.where(higher, below, here)
        found: Floats = 2 * (low + reach * (above - level) / (above - below))[:, 0]
        return found

    def areas(self) -> Floats:
        """Return the areas over the heights, mm."""
        found: Floats = 1 / self.at(np.zeros(1))[:, 0]
        return found

    def outside(self, distance: Floats) -> Floats:
        """Return the shares of the area farther than a distance, shape (k,), from the middle."""
        places = (np.arange(80) + 0.5) / 80
        inside = 2 * distance * self.at(distance[:, None] * places).mean(axis=1)
        found: Floats = np.maximum(1 - inside, 0.0)
        return found

    def spectra(self, frequency: Floats) -> Floats:
        """Return the transforms, (k, n)."""
        boxes = np.sinc(np.outer(self.wide, frequency)) * np.sinc(np.outer(self.narrow, frequency))
        main, tails = (
            np.exp(-2 * (math.pi * np.outer(sigma, frequency)) ** 2)
            for sigma in (self.sigma, WIDER * self.spread)
        )
        share = self.tail[:, None]
        found: Floats = (1 - share) * boxes * main + share * tails
        return found


def _trapezoid(z: Floats, large: Floats, small: Floats, soft: Floats) -> Floats:
    """Return two rectangles and a Gaussian convolved: the second difference of its integral."""
    far, near = (large + small) / 2, (large - small) / 2
    rise = _twice(far - z, soft) - _twice(near - z, soft)
    fall = _twice(-near - z, soft) - _twice(-far - z, soft)
    found: Floats = (rise - fall) / (large * small)
    return found


def _twice(z: Floats, sigma: Floats) -> Floats:
    """Return the twofold integral of a Gaussian."""
    u = z / sigma
    bell = np.exp(-0.5 * u * u) / math.sqrt(2 * math.pi)
    found: Floats = z * special.ndtr(u) + sigma * bell
    return found
