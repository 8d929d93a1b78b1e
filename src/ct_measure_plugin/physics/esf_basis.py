"""The shapes from which an edge spread function is composed.

Each shape family has the MTF ``[1 + Σ_k a_k P_k(u²)] exp(-(u/√2)^β)`` with ``u = 2πfs``: an
envelope of width 1/s and steepness β (2: Gaussian; large: nearly a sharp cut-off; below 2: long
tails of the line spread) times an even polynomial without constant term, so that MTF(0) = 1.
With β = 2 this is the even Gauss-Hermite expansion of the line spread function. Edge enhancement,
an MTF above 1 and overshoot need no more than a positive a_1.

All shapes of all widths and steepnesses are tabulated once over x = d/s0 and compressed by a
singular value decomposition: a fit then handles some forty columns instead of thousands.
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

#: Steepnesses of the envelope.
STEEPNESS = (1.6, 2.0, 2.5, 3.2, 4.5, 7.0)

#: Widths of the envelope relative to the width of the best Gaussian edge.
RATIOS = tuple(float(r) for r in np.geomspace(0.5, 1.8, 14))

#: Terms of the polynomial.
TERMS = 7

#: Table of x = d/s0.
REACH, STEP = 40.0, 0.04

#: Singular values below this share of the largest are dropped.
COMPRESSION = 1e-7


@dataclass(frozen=True, slots=True, eq=False)
class Dictionary:
    """Compressed tables of all shapes.

    Attributes
    ----------
    members : int
        Number m of pairs of width and steepness.
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
    _steepness: Floats
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
        return _end(float(self._steepness[member]))

    def transfer(self, member: int, v: Floats) -> Floats:
        """Return one member's MTF shapes at v = 2πf s0, shape (n, 1 + TERMS)."""
        return _transfer(
            v * self._ratio[member],
            float(self._steepness[member]),
            self._orthogonal[member // len(RATIOS)],
        )


def _end(steepness: float) -> float:
    return math.sqrt(2) * math.pow(34.0, 1 / steepness)


def _powers(u: Floats, steepness: float) -> Floats:
    envelope = np.exp(-((u / math.sqrt(2)) ** steepness))
    return np.stack([(u * u / 4) ** k * envelope for k in range(TERMS + 1)], axis=1)


def _transfer(u: Floats, steepness: float, orthogonal: Floats) -> Floats:
    powers = _powers(u, steepness)
    powers[:, 1:] = powers[:, 1:] @ orthogonal
    return powers


def gauss_nodes(top: float) -> tuple[Floats, Floats]:
    """Return Gauss-Legendre nodes and weights on 0 to top, in panels that grow."""
    x, w = np.polynomial.legendre.leggauss(16)
    panels = top * np.linspace(0, 1, 65) ** 1.5
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
    for steepness in STEEPNESS:
        u, w = gauss_nodes(_end(steepness))
        shapes = _powers(u, steepness)
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
    members = len(STEEPNESS) * len(RATIOS)
    return Dictionary(
        members,
        (mix * scale[:, None]).reshape(kept, members, TERMS + 1),
        edge,
        edge.derivative(1),
        edge.derivative(2),
        np.repeat(STEEPNESS, len(RATIOS)),
        np.tile(RATIOS, len(STEEPNESS)),
        tuple(orthogonal),
    )
