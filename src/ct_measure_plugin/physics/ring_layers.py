"""Profiles of rings in polar means: deviations, their noise, and scores of arcs."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy import ndimage

from ct_measure_plugin.physics.ring_polar import SECTORS

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.ring_polar import Polar

    Floats = NDArray[np.float64]

__all__ = [
    "ARCS",
    "CORES",
    "Deviations",
    "Layer",
    "channel_profile",
    "core_profile",
    "smooth_matrix",
]

#: Widths of the core in radial steps: 1, 3 and 5 pixels.
CORES = (2, 6, 10)

#: Lengths of the arcs in sectors.
ARCS = (6, 10, 14, 18, 24)

#: Steps on either side of a core of each width that stand for its surroundings.
SIDES = (8, 12, 20)

#: Steps on either side of a channel's ring over which its profile is followed.
REACH = 12

#: Degree of the polynomial in the radius that describes the strength of the noise.
DEGREE = 3

#: Least power of the noise anywhere, as a share of the median.
LEAST_NOISE = 0.4

#: An arc counts if at least this share of it lies in the region.
FILLED = 0.8

#: Steps with fewer sectors in the region are left out.
FEWEST_SECTORS = SECTORS // 2

#: Correlations of neighbouring groups of sectors that are believed.
LEAST_SHARED, MOST_SHARED = -0.2, 0.4


class Deviations:
    """Deviations of cores of one width, for one or many sets of polar means.

    Attributes
    ----------
    sums : ndarray, shape (sets, steps, sectors)
        Deviation times the number of pixels of the core; 0 where it is not known.
    noise : ndarray, shape (sets, steps)
        SD of a deviation times the root of its pixels.
    """

    def __init__(self, layer: Layer, means: Floats) -> None:
        rest = ndimage.correlate1d(means, layer.kernel, axis=1, mode="constant")
        self.sums: Floats = rest * layer.weight.astype(rest.dtype)
        self.layer = layer
        self.noise = self._noise()

    def groups(self, rows: NDArray[np.intp], g: int) -> tuple[Floats, Floats]:
        """Return the unit deviations of groups of sectors about their circle's mean, and if held.

        Shapes (sets, rows, groups) and (rows, groups).
        """
        weight = self.layer.weight[rows].astype(self.sums.dtype)
        sums = self.sums[:, rows]
        mean = sums.sum(axis=2, keepdims=True) / np.maximum(weight.sum(1)[:, None], 1.0)
        shape = (len(rows), SECTORS // g, g)
        parts = (sums - weight * mean).reshape(-1, *shape).sum(axis=3)
        sizes = weight.reshape(shape).sum(axis=2)
        return parts / np.sqrt(np.maximum(sizes, 1.0)), sizes > 0

    def _noise(self) -> Floats:
        """Return the noise of each step: a smooth curve through the scatter of its groups.

        Steps that stand out are cut down to the curve plus three standard deviations, twice, so
        that a ring has no hold on it.
        """
        layer = self.layer
        sets, steps = len(self.sums), len(layer.weight)
        energy, freedom = np.zeros((sets, steps)), np.zeros(steps)
        for rows, g in layer.zones():
            unit, held = self.groups(rows, g)
            freedom[rows] = np.maximum(held.sum(axis=1) - 1, 1)
            energy[:, rows] = np.sum(unit**2, axis=2) / freedom[rows]
        found = np.zeros(energy.shape)
        index = np.flatnonzero(layer.valid)
        if not len(index):
            return found
        degree = min(DEGREE, len(index) // (8 * layer.core))
        hat = smooth_matrix(len(index), freedom[index], degree)
        own = energy[:, index]
        most = 1.0 + 3.0 * np.sqrt(2.0 / freedom[index])
        middle = np.median(own, axis=1, keepdims=True)
        curve = middle
        for _ in range(3):
            curve = np.maximum(np.minimum(own, curve * most) @ hat.T, LEAST_NOISE * middle)
        found[:, index] = np.sqrt(curve)
        return found

    def scores(self, noise: Floats | None = None) -> Floats:
        """Return |sum| over its SD for every arc, shape (sets, arcs, steps, starts).

        The SD is that of given noise, or of its own.
        """
        total: Floats = np.abs(_arcs(self.sums))
        noise = (self.noise if noise is None else noise)[:, None, :, None]
        return total * self.layer.scale / np.where(noise > 0, noise, np.inf)

    def largest(self) -> Floats:
        """Return the largest score of each set."""
        total = _running(self.sums)
        noise = np.where(self.noise > 0, self.noise, np.inf)
        found = np.zeros(len(total))
        for length, scale in zip(ARCS, self.layer.scale, strict=True):
            starts = 1 if length == SECTORS else SECTORS
            part = total[..., length : length + starts] - total[..., :starts]
            np.abs(part, out=part)
            part *= scale[:, :starts]
            found = np.maximum(found, (part.max(axis=2) / noise).max(axis=1))
        return found

    def shared(self) -> float:
        """Return the correlation of neighbouring groups times their length in steps.

        Neighbours share the noise across their border, so that it falls as one over their length.
        """
        top = bottom = 0.0
        for rows, g in self.layer.zones():
            unit, held = self.groups(rows, g)
            first, count = unit[0], SECTORS // g
            energy = np.sum(first**2, axis=1)
            near = np.sum(first * np.roll(first, -1, axis=1), axis=1)
            # a ring's own steps are left out; the mean taken out lowers every correlation
            usual = held.all(axis=1) & (energy > 0)
            usual &= energy < 2.0 * self.noise[0, rows] ** 2 * (count - 1)
            rho = near[usual] / energy[usual] + 1.0 / (count - 1)
            length = self.layer.arc[rows[usual]] * g
            top += float(np.sum(rho / length))
            bottom += float(np.sum(1.0 / length**2))
        return top / bottom if bottom > 0 else 0.0


class Layer:
    """The geometry of all rings of one profile.

    Parameters
    ----------
    polar : Polar
        The geometry.
    core : int
        The width in steps.
    taps : ndarray, optional
        A whitening filter.
    profile : ndarray, optional
        Weights along the radius; by default those of a core minus its surroundings.

    Attributes
    ----------
    core : int
        The width in steps.
    kernel : ndarray
        The profile behind the filter.
    weight : ndarray, shape (steps, sectors)
        Pixels of each core; 0 where a side is missing.
    valid : ndarray of bool, shape (steps,)
        Where any core is whole.
    scale : ndarray, shape (arcs, steps, starts)
        One over the root of an arc's pixels; 0 for an arc that is not in the region.
    arc : ndarray, shape (steps,)
        Length of a sector in pixels.
    """

    def __init__(
        self, polar: Polar, core: int, taps: Floats | None = None, profile: Floats | None = None
    ) -> None:
        self.core = core
        self.kernel = core_profile(core) if profile is None else profile
        if taps is not None:
            self.kernel = np.convolve(self.kernel, taps)
        held = (polar.count > 0).astype(float)
        reach = len(self.kernel)
        full = ndimage.correlate1d(held, np.ones(reach), axis=0, mode="constant")
        self.whole = full > reach - 0.5
        self.whole[self.whole.sum(axis=1) < FEWEST_SECTORS] = False
        pixels = ndimage.correlate1d(polar.count, _box(core), axis=0, mode="constant")
        self.weight: Floats = np.where(self.whole, pixels, 0.0)
        self.valid: NDArray[np.bool_] = self.whole.any(axis=1)
        self.group = polar.group
        self.arc = polar.arc
        weight = _arcs(self.weight[None])[0]
        inside = _arcs((self.weight > 0).astype(float)[None])[0]
        good = inside >= FILLED * np.array(ARCS)[:, None, None]
        scale = np.where(good, 1.0 / np.sqrt(np.maximum(weight, 1.0)), 0.0)
        self.scale: Floats = scale.astype(np.float32)

    def zones(self) -> list[tuple[NDArray[np.intp], int]]:
        """Return the steps whose sectors are judged in groups of 1, 2, 3 or 6."""
        return [
            (np.flatnonzero((self.group == g) & self.valid), int(g))
            for g in np.unique(self.group[self.valid])
        ]

    def inflation(self, shared: float) -> Floats:
        """Return by how much an arc's SD exceeds that of independent groups, (arcs, steps, 1)."""
        rho = np.clip(shared / (self.arc * self.group), LEAST_SHARED, MOST_SHARED)
        groups = np.array(ARCS)[:, None] / self.group[None, :]
        found: Floats = np.sqrt(1.0 + 2.0 * rho * np.maximum(1.0 - 1.0 / groups, 0.0))
        return found[:, :, None]


def core_profile(core: int) -> Floats:
    """Return a core minus its surroundings, each of weight 1.

    Widths are whole numbers of pixels, so that their borders fall on the middle of a step, which
    counts half to either side.
    """
    side = SIDES[CORES.index(core)]
    found = np.zeros(core + 2 * side + 1)
    found[side : side + core + 1] = _box(core) / core
    flank = 0.5 * _box(side) / side
    found[: side + 1] -= flank
    found[side + core :] -= flank
    return found


def channel_profile() -> Floats:
    """Return the ring of a bad channel behind a filter that makes its noise white.

    The backprojection of one reading is a step back from its tangent circle: far from the centre
    its spectrum is that of the kernel over √f, an eighth of a turn out of phase (stationary
    phase). The noise's is the kernel times √f, the kernel a window times f: the filter that
    whitens the noise leaves of the ring the phase alone, (1 + H)/√2 with H the Hilbert transform.
    Levels and slopes are taken out, the ends are tapered.
    """
    k = np.arange(-REACH, REACH + 1)
    odd = np.where(k % 2 != 0, 2.0 / (np.pi * np.where(k == 0, 1, k)), 0.0)
    window = np.cos(0.5 * np.pi * k / (REACH + 1)) ** 2
    shape = ((k == 0) + odd) * window
    level = window / window.sum()
    slope = k * window / np.sum(k**2 * window)
    found: Floats = shape - shape.sum() * level - np.sum(shape * k) * slope
    return found


def _box(width: int) -> Floats:
    """Return the weights of steps in a box whose borders fall on the middle of a step."""
    found = np.ones(width + 1)
    found[[0, -1]] = 0.5
    return found


def smooth_matrix(count: int, weight: Floats, degree: int) -> Floats:
    """Return the matrix of a weighted polynomial fit over steps, shape (steps, steps)."""
    x = np.linspace(-1.0, 1.0, count) if count > 1 else np.zeros(1)
    design = np.polynomial.legendre.legvander(x, min(degree, max(count // 8, 0)))
    root = np.sqrt(weight)[:, None]
    found: Floats = design @ np.linalg.pinv(design * root) * root.T
    return found


def _running(values: Floats) -> Floats:
    """Return the running sums from 0 over two turns, less the last, shape (…, 2 sectors)."""
    total = np.zeros((*values.shape[:-1], 2 * SECTORS), dtype=values.dtype)
    np.cumsum(values, axis=-1, out=total[..., 1 : SECTORS + 1])
    total[..., SECTORS + 1 :] = total[..., 1:SECTORS] + total[..., SECTORS, None]
    return total


def _arcs(values: Floats) -> Floats:
    """Return the sums over each length of arc from each sector on, shape (sets, arcs, …)."""
    total = _running(values)
    found = [total[..., length : length + SECTORS] - total[..., :SECTORS] for length in ARCS]
    return np.stack(found, axis=1)
