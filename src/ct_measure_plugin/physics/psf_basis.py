"""The shapes from which a rotationally symmetric point spread function is composed.

The same families as for the edge spread function (:mod:`esf_basis`), MTF by MTF; here their
Hankel transforms over the radius are tabulated and compressed.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cache
from typing import TYPE_CHECKING

import numpy as np
from scipy import interpolate, special

from ct_measure_plugin.physics.esf_basis import RATIOS, TERMS, dictionary, gauss_nodes

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["RadialDictionary", "radial_dictionary"]

#: Table of x = r/s0.
REACH, STEP = 32.0, 0.04

#: Singular values below this share of the largest are dropped.
COMPRESSION = 1e-7


@dataclass(frozen=True, slots=True, eq=False)
class RadialDictionary:
    """Compressed tables of all shapes.

    Attributes
    ----------
    columns : ndarray, shape (r, m, 1 + TERMS)
        Each member's shapes in terms of the r compressed functions.
    spread : spline of x
        The compressed functions of the radius, per unit area and width.
    """

    columns: Floats
    spread: interpolate.CubicSpline
    bend: interpolate.PPoly

    def spreads(self, x: Floats) -> Floats:
        """Return the compressed functions at x, shape (n, r); 0 beyond the table."""
        found: Floats = self.spread(np.minimum(x, REACH)) * (x < REACH)[:, None]
        return found

    def bends(self, x: Floats) -> Floats:
        """Return their second derivatives at x, shape (n, r)."""
        found: Floats = self.bend(np.minimum(x, REACH)) * (x < REACH)[:, None]
        return found

    def transfer(self, member: int, v: Floats) -> Floats:
        """Return one member's MTF shapes at v = 2πf s0, shape (n, 1 + TERMS)."""
        return dictionary().transfer(member, v)


@cache
def radial_dictionary() -> RadialDictionary:
    """Return the dictionary; made on first use and kept (about a second).

    >>> shapes = radial_dictionary()  # the widest Gaussian's centre is 1 / (2π s²)
    >>> gauss = (shapes.spreads(np.array([0.0])) @ shapes.columns[:, 28:42, 0])[0]
    >>> bool(np.allclose(gauss * 2 * np.pi * np.array(RATIOS) ** 2, 1, rtol=1e-5))
    True
    """
    edges = dictionary()
    x = np.arange(0.0, REACH + STEP / 2, STEP)
    tables = []
    for first in range(0, edges.members, len(RATIOS)):
        # one table for all widths of a family: its widest argument belongs to the narrowest
        u, w = gauss_nodes(edges.end(first))
        shapes = edges.transfer(first, u / RATIOS[0]) * (w * u / (2 * math.pi))[:, None]
        widest = np.arange(0.0, REACH / RATIOS[0] + STEP, STEP)
        table = special.j0(np.outer(widest, u)) @ shapes
        spline = interpolate.CubicSpline(widest, table)
        tables += [spline(x / ratio) / ratio**2 for ratio in RATIOS]
    table = np.stack(tables, axis=1)  # (x, member, term)
    rows = np.unique(np.concatenate([np.arange(0, 250), np.arange(250, len(x), 4)]))
    weight = np.sqrt(x[rows] + STEP)  # rings count by their area
    flat = (table[rows] * weight[:, None, None]).reshape(len(rows), -1)
    _, s, vt = np.linalg.svd(flat, full_matrices=False)
    kept = int(np.sum(s > COMPRESSION * s[0]))
    mix = vt[:kept]
    functions = table.reshape(len(x), -1) @ mix.T
    scale = np.abs(functions).max(axis=0)
    spread = interpolate.CubicSpline(x, functions / scale)
    columns = (mix * scale[:, None]).reshape(kept, edges.members, TERMS + 1)
    return RadialDictionary(columns, spread, spread.derivative(2))
