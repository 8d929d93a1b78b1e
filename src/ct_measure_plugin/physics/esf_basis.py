"""The shapes from which an edge spread function is composed.

Each shape family has the MTF ``[1 + Σ_k a_k P_k(u²)] envelope(u)`` with ``u = 2πfs``, the even
polynomials P_k without constant term, so that MTF(0) = 1. The envelope is one of

    κ = 0   exp(-u²/2), the Gaussian: the sum is the even Gauss-Hermite expansion of the line spread
    κ > 0   (1 - κu²/2)^(1/κ) up to its zero: the smooth cut-off of a reconstruction kernel
    κ < 0   exp((1 - sqrt(1 + |κ|u²)) / |κ|): longer tails of the line spread

all with the logarithm ``-u²/2 - κu⁴/8 + …``: s is the standard deviation of the line spread, and
κ tells how much flatter than a Gaussian the MTF begins and how much steeper it ends. An MTF is
analytic at 0 if the line spread has moments, which exponentials of other powers of u are not. Edge
enhancement, an MTF above 1 and overshoot need no more than a positive a_1.

All shapes of all widths and flatnesses are tabulated once over x = d/s0 and compressed by a
singular value decomposition: a fit then handles about a hundred columns instead of thousands.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cache
from typing import TYPE_CHECKING

import numpy as np
from scipy import interpolate

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["Dictionary", "dictionary", "gauss_nodes"]

#: Flatnesses κ of the envelope. A raised cosine down to 0 lies near 0.37.
FLATNESS = (-0.7, -0.25, 0.0, 0.17, 0.29, 0.42, 0.67)

#: Widths of the envelope relative to the width of the best Gaussian edge.
RATIOS = tuple(float(r) for r in np.geomspace(0.5, 1.8, 14))

#: Terms of the polynomial.
TERMS = 7

#: Table of x = d/s0.
REACH, STEP = 40.0, 0.04

#: Envelopes that have no end are followed down to exp(-34), those with long tails to exp(-60):
#: times the highest power of u this is below 1e-7 of the largest value.
VANISHED, TAIL_VANISHED = 34.0, 60.0

#: Singular values below this share of the largest are dropped.
COMPRESSION = 1e-7


@dataclass(frozen=True, slots=True, eq=False)
class Dictionary:
    """Compressed tables of all shapes.

    Attributes
    ----------
    members : int
        Number m of pairs of width and flatness.
    columns : ndarray, shape (r, m, 1 + TERMS)
        Each member's edge shapes in terms of the r compressed functions.
    edge, line : spline of x
        The compressed functions, odd, and their derivatives, even.
    """

    members: int
    columns: Floats
    edge: interpolate.CubicSpline
    line: interpolate.PPoly
    slope: interpolate.PPoly
    _flatness: Floats
    _ratio: Floats
    _orthogonal: tuple[Floats, ...]

    def edges(self, x: Floats) -> Floats:
        """Return the compressed edge functions at x, shape (n, r)."""
        near = np.minimum(np.abs(x), REACH)
        found: Floats = self.edge(near) * np.sign(x)[:, None]
        return found

    def lines(self, x: Floats) -> Floats:
        """Return their first derivatives at x, shape (n, r)."""
        found: Floats = self.line(np.minimum(np.abs(x), REACH))
        return found

    def slopes(self, x: Floats) -> Floats:
        """Return their second derivatives at x, shape (n, r)."""
        found: Floats = self.slope(np.minimum(np.abs(x), REACH)) * np.sign(x)[:, None]
        return found

    def end(self, member: int) -> float:
        """Return the u beyond which a member's envelope has vanished."""
        return _end(float(self._flatness[member]))

    def transfer(self, member: int, v: Floats) -> Floats:
        """Return one member's MTF shapes at v = 2πf s0, shape (n, 1 + TERMS)."""
        return _transfer(
            v * self._ratio[member],
            float(self._flatness[member]),
            self._orthogonal[member // len(RATIOS)],
        )


def _end(flatness: float) -> float:
    if flatness > 0:
        return math.sqrt(2 / flatness)
    if flatness == 0:
        return math.sqrt(2 * VANISHED)
    return math.sqrt(((1 - flatness * TAIL_VANISHED) ** 2 - 1) / -flatness)


def _powers(u: Floats, flatness: float) -> Floats:
    square = u * u
    if flatness > 0:
        envelope = np.maximum(1 - flatness / 2 * square, 0.0) ** (1 / flatness)
    elif flatness == 0:
        envelope = np.exp(-square / 2)
    else:
        envelope = np.exp((np.sqrt(1 - flatness * square) - 1) / flatness)
    found = np.empty((len(u), TERMS + 1))
    found[:, 0] = envelope
    for k in range(TERMS):
        found[:, k + 1] = found[:, k] * square / 4
    return found


def _transfer(u: Floats, flatness: float, orthogonal: Floats) -> Floats:
    powers = _powers(u, flatness)
    powers[:, 1:] = powers[:, 1:] @ orthogonal
    return powers


def gauss_nodes(top: float) -> tuple[Floats, Floats]:
    """Return Gauss-Legendre nodes and weights on 0 to top, in panels that grow."""
    x, w = np.polynomial.legendre.leggauss(16)
    panels = top * np.linspace(0, 1, 1 + max(64, round(4 * top))) ** 1.5
    half = np.diff(panels)[:, None] / 2
    return (panels[:-1, None] + half * (x + 1)).ravel(), (half * w).ravel()


@cache
def dictionary() -> Dictionary:
    """Return the dictionary; made on first use and kept (about a second).

    >>> shapes = dictionary()
    >>> bool(shapes.transfer(0, np.array([0.0]))[0, 0] == 1.0)
    True
    """
    x = np.arange(0.0, REACH + STEP / 2, STEP)
    tables, orthogonal = [], []
    for flatness in FLATNESS:
        u, w = gauss_nodes(_end(flatness))
        shapes = _powers(u, flatness)
        _, r = np.linalg.qr(shapes[:, 1:] * np.sqrt(w)[:, None])
        turn = np.linalg.inv(r) * np.sign(np.diag(r))
        orthogonal.append(turn)
        shapes[:, 1:] = shapes[:, 1:] @ turn
        widest = np.arange(0.0, REACH / RATIOS[0] + STEP, STEP)
        odd = np.sin(np.outer(widest, u)) @ (shapes * (w / (np.pi * u))[:, None])
        spline = interpolate.CubicSpline(widest, odd)
        tables += [spline(x / ratio) for ratio in RATIOS]
    table = np.stack(tables, axis=1)  # (x, member, term)
    # far tails matter less and are smooth: thin them out for the decomposition
    rows = np.unique(np.concatenate([np.arange(0, 250), np.arange(250, len(x), 4)]))
    _, s, vt = np.linalg.svd(table[rows].reshape(len(rows), -1), full_matrices=False)
    kept = int(np.sum(s > COMPRESSION * s[0]))
    mix = vt[:kept]
    functions = table.reshape(len(x), -1) @ mix.T
    scale = np.abs(functions).max(axis=0)
    edge = interpolate.CubicSpline(x, functions / scale)
    members = len(FLATNESS) * len(RATIOS)
    return Dictionary(
        members,
        (mix * scale[:, None]).reshape(kept, members, TERMS + 1),
        edge,
        edge.derivative(1),
        edge.derivative(2),
        np.repeat(FLATNESS, len(RATIOS)),
        np.tile(RATIOS, len(FLATNESS)),
        tuple(orthogonal),
    )
