"""A radial spectrum continued below its lowest usable frequency."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["Continuation", "continuation", "continued"]

#: Rings from which the curve is continued.
RINGS = 7

#: Exponents tried for the mixed form, as that of the last of these rings.
BENDS = np.linspace(-8.0, 2.0, 61)
FINER = np.linspace(-1.0, 1.0, 21)


@dataclass(frozen=True, slots=True)
class Continuation:
    """Forms (c0 + c1 f) exp(b f²) that fit a curve's first rings.

    Attributes
    ----------
    forms : ndarray, shape (m, 3)
        c0, c1 and b of each.
    weights : ndarray, shape (m,)
        How far each is to be believed; their sum is 1.
    """

    forms: Floats
    weights: Floats

    def each(self, at: Floats) -> Floats:
        """Return every form's values, shape (m, *at.shape)."""
        c0, c1, b = (self.forms[:, k].reshape(-1, *[1] * at.ndim) for k in range(3))
        found: Floats = (c0 + c1 * at) * np.exp(b * at**2)
        return found

    def mean(self, at: Floats) -> Floats:
        """Return the weighted mean of the forms' values."""
        found: Floats = np.tensordot(self.weights, self.each(at), axes=1)
        return found


def continued(x: Floats, y: Floats, doubt: Floats, at: Floats) -> Floats:
    """Return a curve's values at frequencies below its first one.

    Parameters
    ----------
    x, y : ndarray, shape (g,)
        Usable frequencies, increasing, and the NPS there.
    doubt : ndarray, shape (g,)
        Relative standard uncertainty of y.
    at : ndarray
        Where, at least 0.

    Examples
    --------
    >>> f = np.arange(3, 20) / 32
    >>> ramp = f * np.exp(-3 * f**2)
    >>> continued(f, ramp, np.full(17, 0.01), np.array([0.0, 0.05])).round(3).tolist()
    [0.0, 0.05]
    """
    return continuation(x, y, doubt).mean(at)


def continuation(x: Floats, y: Floats, doubt: Floats) -> Continuation:
    """Return the forms that continue a curve below its first frequency.

    Notes
    -----
    Three forms are fitted to the first seven rings: c0 exp(b f²), which holds white and smooth
    noise; c1 f exp(b f²), which falls like the ramp of filtered backprojection (K. M. Hanson, Med.
    Phys. 6 (1979) 441); and their sum, a ramp above what aliasing by the pixels leaves at 0 (M. F.
    Kijewski and P. F. Judy, Phys. Med. Biol. 32 (1987) 565). They are averaged with the weights
    exp(−(χ² + 2p)/2), p parameters each (H. Akaike, IEEE Trans. Autom. Control 19 (1974) 716, as
    commonly turned into weights), so that noise alone does not choose between them.
    """
    x, y, doubt = x[:RINGS], y[:RINGS], doubt[:RINGS]
    positive = y > 0
    if positive.sum() < 4:
        return Continuation(np.array([[float(y[0]), 0.0, 0.0]]), np.ones(1))
    f, v = x[positive], y[positive]
    weight = 1.0 / np.maximum(doubt[positive], 1e-6) ** 2
    found = [_level(f, v, weight), _ramp(f, v, weight), _mixed(f, v, weight)]
    criteria = np.array([misfit for _, misfit in found])
    share = np.exp(-(criteria - criteria.min()) / 2.0)
    return Continuation(np.array([form for form, _ in found]), share / share.sum())


def _level(f: Floats, v: Floats, weight: Floats) -> tuple[tuple[float, float, float], float]:
    a, b, misfit = _logarithmic(f, np.log(v), weight)
    return (np.exp(a), 0.0, b), misfit + 4.0


def _ramp(f: Floats, v: Floats, weight: Floats) -> tuple[tuple[float, float, float], float]:
    a, b, misfit = _logarithmic(f, np.log(v / f), weight)
    return (0.0, np.exp(a), b), misfit + 4.0


def _logarithmic(f: Floats, value: Floats, weight: Floats) -> tuple[float, float, float]:
    """Fit value = a + b f²; return a, b and the misfit."""
    square = f**2
    total = weight.sum()
    middle, mean = np.sum(weight * square) / total, np.sum(weight * value) / total
    b = np.sum(weight * (square - middle) * value) / np.sum(weight * (square - middle) ** 2)
    a = mean - b * middle
    return float(a), float(b), float(np.sum(weight * (value - a - b * square) ** 2))


def _mixed(f: Floats, v: Floats, weight: Floats) -> tuple[tuple[float, float, float], float]:
    """Fit the sum of both forms, over a grid of b that is refined once."""
    bends = BENDS / f[-1] ** 2
    for _ in range(2):
        c, misfit = _both(f, v, weight, bends)
        k = int(np.argmin(misfit))
        step = bends[1] - bends[0]
        best = float(bends[k])
        bends = best + step * FINER
    if not np.isfinite(misfit[k]):  # one of the two is not wanted
        return (0.0, 0.0, 0.0), np.inf
    return (float(c[k, 0]), float(c[k, 1]), best), float(misfit[k]) + 6.0


def _both(f: Floats, v: Floats, weight: Floats, bends: Floats) -> tuple[Floats, Floats]:
    """Return c0 and c1 for each b, and the misfit: infinite unless both are positive."""
    level = np.exp(bends[:, None] * f**2) / v
    slope = level * f
    ll, ls, ss = level**2 @ weight, (level * slope) @ weight, slope**2 @ weight
    l1, s1 = level @ weight, slope @ weight
    both = np.stack([l1 * ss - s1 * ls, s1 * ll - l1 * ls], axis=1)
    both /= (ll * ss - ls**2)[:, None]
    off = both[:, :1] * level + both[:, 1:] * slope - 1.0
    misfit = np.where((both > 0).all(axis=1), off**2 @ weight, np.inf)
    return both, misfit
