"""Fit an edge spread function with as much shape as its noise allows.

The shapes of :mod:`esf_basis` are fitted by generalised least squares. Their coefficients carry
zero-mean Gaussian priors whose width falls from term to term; width and flatness of the envelope
and the strength of the prior are not chosen but averaged over, each weighted by its evidence
(Bayesian model averaging). Smoothness therefore comes from the data: a clean edge gets every
term, a noisy one little more than its width and its first departure from a Gaussian.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol

import numpy as np
from scipy import linalg

from ct_measure_plugin.physics.esf_basis import TERMS, dictionary

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.edge_bins import EdgeBins

    Floats = NDArray[np.float64]

__all__ = ["EsfFit", "Part", "Solved", "averaged_transfer", "fit_esf", "solve_averaged", "whiten"]

#: Prior standard deviation of the first coefficient relative to the step, and how it falls from
#: each coefficient to the next. Chosen on simulated edges of eleven kernels, of which the
#: benchmark tests/benchmarks/edge_mtf.py shows three.
STRENGTHS = np.array([0.02, 0.07, 0.25, 1.0])
FALL = 0.5 ** np.arange(TERMS)

#: Each strength's prior weight over that of the next smaller one: simple shapes are likelier.
RARER = 0.5

#: Fall of the whitened sum of squares from which a slope of the plateaus is believed: (3 SD)².
SLOPE_STANDS_OUT = 9.0

#: Share of the weight that the least likely combinations, left out of the average, hold together.
NEGLIGIBLE = 0.02


class Shapes(Protocol):
    """A dictionary of shapes: of edges, or of point spread functions."""

    @property
    def columns(self) -> Floats:
        """Each member's shapes by compressed functions, shape (r, m, 1 + TERMS)."""


@dataclass(frozen=True, slots=True, eq=False)
class EsfFit:
    """A fitted edge spread function.

    Attributes
    ----------
    scale : float
        Width s0 that the shapes are tabulated for, mm.
    contrast : float
        Step from the negative to the positive side.
    chi2 : float
        Whitened sum of squares left, per degree of freedom.
    shift : float
        Distance of the found edge from d = 0, mm.
    level, gradient : float
        Mean of the two plateaus at d = 0, and common slope per mm.
    """

    scale: float
    contrast: float
    chi2: float
    shift: float
    level: float
    gradient: float
    _mix: Floats
    _parts: tuple[Part, ...]
    _nuisance: _Nuisance
    _root: Floats

    @property
    def mix(self) -> Floats:
        """Weights of the dictionary's compressed functions, shape (r,)."""
        return self._mix

    def doubt(self, rows: Floats, free: Floats | None = None) -> Floats:
        """Return the standard uncertainty of linear functions of the fit, shape (k,).

        Parameters
        ----------
        rows : ndarray, shape (k, r)
            Each function in terms of the compressed functions' weights.
        free : ndarray, shape (k, 3), optional
            In terms of level at d = 0, shift (as the height of a bump) and slope per mm too.
        """
        nuisance = self._nuisance
        total = np.zeros(len(rows))
        effective = rows
        if free is not None:
            across = free[:, : len(nuisance.inverse)] * nuisance.unit @ nuisance.inverse
            total += np.sum(across**2, axis=1)
            effective = rows - across @ nuisance.coupling
        total += np.sum((effective @ self._root) ** 2, axis=1)
        found: Floats = np.sqrt(total)
        return found

    def esf(self, d: Floats) -> Floats:
        """Return the fitted edge spread function at distances d in mm."""
        found: Floats = (
            self.level + self.gradient * d + dictionary().edges(d / self.scale) @ self._mix
        )
        return found

    def lsf(self, d: Floats) -> Floats:
        """Return its derivative without the common slope."""
        found: Floats = dictionary().lines(d / self.scale) @ self._mix / self.scale
        return found

    def mtf(self, frequency: Floats) -> tuple[Floats, Floats]:
        """Return the MTF and its standard uncertainty at frequencies in mm⁻¹."""
        return averaged_transfer(self._parts, 2 * math.pi * self.scale * frequency)


def averaged_transfer(parts: tuple[Part, ...], v: Floats) -> tuple[Floats, Floats]:
    """Return the MTF of averaged fits and its standard uncertainty at v = 2πf s0."""
    shapes = dictionary()
    tables: dict[int, Floats] = {}
    values, variances = [], []
    for part in parts:
        if part.member not in tables:
            tables[part.member] = shapes.transfer(part.member, v)
        table = tables[part.member]
        curve = table @ (part.coefficients / part.coefficients[0])
        # derivatives with respect to (step, coefficients) of their quotient
        jacobian = table / part.coefficients[0]
        jacobian[:, 0] = (table[:, 0] - curve) / part.coefficients[0]
        values.append(curve)
        variances.append(np.sum((jacobian @ part.covariance) * jacobian, axis=1))
    weights = np.array([part.weight for part in parts])
    stack = np.array(values)
    mean = weights @ stack
    variance = weights @ (np.array(variances) + (stack - mean) ** 2)
    return mean, np.sqrt(variance)


@dataclass(frozen=True, slots=True, eq=False)
class Part:
    """One envelope: its weight, and its posterior averaged over the priors."""

    member: int
    weight: float
    coefficients: Floats
    covariance: Floats


@dataclass(frozen=True, slots=True, eq=False)
class _Nuisance:
    """How level, shift and slope follow from the data once the shapes are known.

    ``free = inverse @ (data - coupling @ mix)`` with whitened data of unit variance; `unit`
    turns the ramp's height at the farthest bin into a slope per mm.
    """

    inverse: Floats
    coupling: Floats
    unit: Floats


def fit_esf(bins: EdgeBins, scale: float, covariance: Floats) -> EsfFit:
    """Return the averaged fit of binned edge data.

    Parameters
    ----------
    bins : EdgeBins
        The data.
    scale : float
        Sigma in mm of the best Gaussian edge: the shapes span 0.5 to 1.8 times this width.
    covariance : ndarray, shape (n, n) or (n,)
        Noise covariance of the bins, or their variances.

    Notes
    -----
    Constant, step and position have flat priors. For envelope m and strength t the evidence is
    that of a linear model with Gaussian noise and prior (Bishop 2006, Pattern Recognition and
    Machine Learning, eq. 3.86), and the average over them that of Hoeting et al. 1999,
    Statistical Science 14:382, with equal prior weights of the envelopes. The uncertainty holds
    the posterior spread within each combination and the spread between combinations. A common
    slope of both plateaus is allowed where it improves the fit by three standard deviations:
    always allowing it would cost a tenth of the precision.
    """
    shapes = dictionary()
    x = bins.distance / scale
    spread = (bins.spread / scale**2)[:, None]
    edges = shapes.edges(x) + 0.5 * spread * shapes.slopes(x)
    ramp = bins.distance / float(np.abs(bins.distance).max())
    design = np.column_stack([np.ones_like(x), np.exp(-0.5 * x * x), ramp, edges, bins.value])
    white = whiten(design, covariance)
    level = solve_averaged(shapes, np.delete(white, 2, axis=1), 2)
    best = (
        solve_averaged(shapes, white, 3) if _slope_gain(level, white) > SLOPE_STANDS_OUT else level
    )
    contrast = float(sum(p.weight * p.coefficients[0] for p in best.parts))
    reach = float(np.abs(bins.distance).max())
    slope = float(best.free[2]) / reach if len(best.free) > 2 else 0.0
    height = contrast / (math.sqrt(2 * math.pi) * scale)
    return EsfFit(
        scale,
        contrast,
        best.misfit / max(len(x) - len(best.free) - 3, 1),
        -float(best.free[1]) / height if height else 0.0,
        float(best.free[0]),
        slope,
        best.mix,
        best.parts,
        _Nuisance(best.inverse, best.coupling, np.array([1.0, 1.0, reach])[: len(best.free)]),
        _root(shapes, best),
    )


def _root(shapes: Shapes, solved: Solved) -> Floats:
    """Return a matrix, shape (r, k), whose product with its transpose is the mix's covariance."""
    blocks = []
    for part in solved.parts:
        columns = shapes.columns[:, part.member, :]
        value, vector = np.linalg.eigh(part.covariance)
        spread = columns @ (vector * np.sqrt(np.maximum(value, 0.0)))
        off = columns @ part.coefficients - solved.mix
        blocks.append(math.sqrt(part.weight) * np.column_stack([spread, off]))
    return np.concatenate(blocks, axis=1)


@dataclass(frozen=True, slots=True, eq=False)
class Solved:
    """Averaged shapes, coefficients of the nuisance columns, and what is left of the data."""

    parts: tuple[Part, ...]
    mix: Floats
    free: Floats
    misfit: float
    inverse: Floats
    coupling: Floats


def _slope_gain(level: Solved, white: Floats) -> float:
    """Return by how much a common slope would lower the sum of squares of a fit without one."""
    edge = white[:, 3:-1] @ level.mix
    fixed = np.column_stack([white[:, :2], edge])
    both = np.column_stack([white[:, 2], white[:, -1] - edge])
    q, _ = np.linalg.qr(fixed)
    both = both - q @ (q.T @ both)
    return float((both[:, 0] @ both[:, 1]) ** 2 / (both[:, 0] @ both[:, 0]))


def solve_averaged(shapes: Shapes, white: Floats, k: int, strengths: Floats = STRENGTHS) -> Solved:
    """Average over the shapes; the first k columns are nuisance, the last one the data."""
    (r,) = linalg.qr(white, mode="r", check_finite=False)
    r = r[: white.shape[1]]
    core, data = r[k:-1, k:-1], r[k:-1, -1]
    parts = _average(shapes, core, data, strengths)
    mix = sum(
        (p.weight * (shapes.columns[:, p.member, :] @ p.coefficients) for p in parts),
        start=np.zeros(shapes.columns.shape[0]),
    )
    misfit = float(np.sum((data - core @ mix) ** 2)) + float(r[-1, -1] ** 2)
    inverse: Floats = linalg.solve_triangular(r[:k, :k], np.eye(k), check_finite=False)
    free = inverse @ (r[:k, -1] - r[:k, k:-1] @ mix)
    return Solved(parts, mix, free, misfit, inverse, r[:k, k:-1])


def whiten(design: Floats, covariance: Floats) -> Floats:
    """Return columns, shape (n, p), as if the noise of their rows were independent and 1."""
    if covariance.ndim == 1:
        out: Floats = design / np.sqrt(covariance)[:, None]
        return out
    lower = linalg.cholesky(covariance, lower=True, overwrite_a=True, check_finite=False)
    found: Floats = linalg.solve_triangular(lower, design, lower=True, check_finite=False)
    return found


def _average(shapes: Shapes, core: Floats, data: Floats, strengths: Floats) -> tuple[Part, ...]:
    r, m, n = shapes.columns.shape
    table = (core @ shapes.columns.reshape(r, m * n)).reshape(len(core), m, n).transpose(1, 0, 2)
    gram = table.transpose(0, 2, 1) @ table
    right = data @ table
    step = right[:, 0] / gram[:, 0, 0]
    cross = gram[:, 1:, 0] / gram[:, :1, 0]
    inner = gram[:, 1:, 1:] - cross[:, :, None] * gram[:, None, 0, 1:]
    pull = right[:, 1:] - cross * right[:, :1]
    gain = right[:, 0] * step  # what the step alone explains
    prior = np.abs(step)[:, None, None] * strengths[None, :, None] * FALL  # (m, t, n - 1)
    scaled = prior * pull[:, None]
    # the last row of the bordered factor is the factor's inverse times the border
    bordered = np.zeros((*scaled.shape[:2], n, n))
    bordered[..., :-1, :-1] = prior[..., :, None] * inner[:, None] * prior[..., None, :]
    bordered[..., np.arange(n), np.arange(n)] += 1.0
    bordered[..., -1, :-1] = scaled
    bordered[..., -1, -1] += np.sum(scaled**2, axis=-1)
    lower = np.linalg.cholesky(bordered)
    depth = np.log(np.diagonal(lower[..., :-1, :-1], axis1=2, axis2=3)).sum(-1)
    evidence = 0.5 * (gain[:, None] + np.sum(lower[..., -1, :-1] ** 2, axis=-1)) - depth
    evidence += np.log(RARER) * np.arange(len(strengths))
    weight = np.exp(evidence - evidence.max())
    weight /= weight.sum()
    rising = np.sort(weight, axis=None)
    weight[weight < rising[np.searchsorted(np.cumsum(rising), NEGLIGIBLE)]] = 0.0
    weight /= weight.sum()
    index = np.arange(1, n)
    parts = []
    for i in np.flatnonzero(weight.any(axis=1)):
        share = weight[i][weight[i] > 0]
        precision = np.repeat(gram[None, i], len(share), axis=0)
        precision[:, index, index] += 1.0 / prior[i][weight[i] > 0] ** 2
        covariance: Floats = np.asarray(np.linalg.inv(precision), dtype=np.float64)
        parts.append(_merged(int(i), share, covariance @ right[i], covariance))
    return tuple(parts)


def _merged(member: int, share: Floats, coefficients: Floats, covariance: Floats) -> Part:
    """Return one envelope's posterior, averaged over the strengths of the prior."""
    total = float(share.sum())
    share = share / total
    mean = share @ coefficients
    off = coefficients - mean
    spread = np.einsum("t,tij->ij", share, covariance) + (share * off.T) @ off
    return Part(member, total, mean, spread)
