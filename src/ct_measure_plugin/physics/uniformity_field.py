"""What the cells of a cylinder's field tell: cup, shading, radial profile, and what is no water."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.uniformity_rings import Circles, CleanField, clean_field
from ct_measure_plugin.physics.uniformity_samples import Cells, student

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["Field", "FieldFit", "gather"]

#: Most and fewest sectors of a ring of the profile, and how many pixels of arc each has at least:
#: shorter ones would share their noise.
SECTORS, FEWEST_SECTORS, ARC_PIXELS = 24, 8, 5.0
#: Pixels that leave the trend by so many standard deviations are no noise.
OUTLYING = 6.0
#: Share of such pixels that is refused: noise that is half again as strong in the middle has 6e-5.
OUTLYING_SHARE = 0.002
#: Coefficients of the polynomial.
TERMS = 6


@dataclass(frozen=True, slots=True, eq=False)
class Field:
    """Sums over cells and over rings of a stack of slices.

    Attributes
    ----------
    means : ndarray, shape (slices, cells)
        Mean of each cell.
    basis : ndarray, shape (slices, cells, 6)
        Means of 1, x, y, 1 − q, 1 − q², 1 − q³ over the same pixels, lengths in units of the
        radius and q = √(1 − r²).
    inner_sd : ndarray, shape (slices, cells)
        SD of the pixels within each cell.
    profile : ndarray, shape (slices, bins, sectors)
        Mean over rings and sectors, of which inner rings have fewer; NaN for those they lack.
    distance : ndarray, shape (bins,)
        Mean distance of a ring's pixels, in units of the radius.
    clean : CleanField
        The cells' means and basis means without rings about the rotation centre.
    """

    means: Floats
    basis: Floats
    inner_sd: Floats
    profile: Floats
    distance: Floats
    clean: CleanField


@dataclass(frozen=True, slots=True, eq=False)
class FieldFit:
    """H = a0 + a1 x + a2 y + a3 (1 − q) + a4 (1 − q²) + a5 (1 − q³), q = √(1 − r²), of the cells.

    Beam hardening adds to a path of L through water the powers L², L³, L⁴, whose inverse Radon
    transforms in a cylinder go as q, q², q³. A parabola is a4 alone.

    Attributes
    ----------
    terms : ndarray, shape (6,)
        The coefficients, lengths in units of the radius.
    covariance : ndarray, shape (6, 6)
        Robust against noise that changes over the field, widened for few cells.
    rest : ndarray, shape (cells,)
        What the fit leaves.
    blocks : ndarray, shape (blocks, 6)
        What blocks of circles, whose means depart from the fit, add to the coefficients.
    """

    terms: Floats
    covariance: Floats
    rest: Floats
    blocks: Floats

    def cup(self, at: float) -> tuple[float, float]:
        """Return H(at) − H(0) without shading, and its standard uncertainty."""
        return self._of(np.array([0.0, 0.0, 0.0, *_bowls(at)]))

    def shading(self, at: float) -> tuple[float, float]:
        """Return the difference across the diameter 2·at along the steepest direction."""
        x, y = self.terms[1], self.terms[2]
        size = math.hypot(x, y)
        if size == 0:
            x, y, size = 1.0, 0.0, 1.0
        return self._of(2 * at * np.array([0.0, x / size, y / size, 0.0, 0.0, 0.0]))

    def radial(self, r: Floats) -> Floats:
        """Return the fit without shading at distances r."""
        found: Floats = self.terms[0] + np.tensordot(self.terms[3:], _bowls(r), axes=1)
        return found

    def radial_doubt(self, r: Floats) -> Floats:
        """Return the standard uncertainty of the same."""
        zero = np.zeros(len(r))
        rows = np.stack([zero + 1.0, zero, zero, *_bowls(r)], axis=1)
        return np.array([self._of(row)[1] for row in rows])

    def _of(self, by: Floats) -> tuple[float, float]:
        """Return a combination of the coefficients, and its standard uncertainty.

        The larger of two: cells scatter independently; circles are whole rings, which lie in many
        cells alike.
        """
        variance = max(float(by @ self.covariance @ by), float(np.sum((self.blocks @ by) ** 2)))
        return float(by @ self.terms), math.sqrt(variance)


def _bowls(r: Floats | float) -> Floats:
    """Return 1 − qⁿ for n = 1, 2, 3, shape (3, …)."""
    q = np.sqrt(1.0 - np.asarray(r) ** 2)
    return np.stack([1.0 - q, 1.0 - q**2, 1.0 - q**3])


def cell_fit(means: Floats, basis: Floats, blocks: Floats) -> FieldFit:
    """Fit the cells' means, shape (cells,), with their basis means, shape (cells, 6).

    `blocks`, shape (blocks, cells), is what departing circles add to the means.

    The covariance is White's with the leverage taken out twice (HC3: J. G. MacKinnon and H. White,
    J. Econometrics 29 (1985) 305): cells in the middle of a cylinder are noisier than at its rim.
    """
    inverse = np.linalg.pinv(basis)
    terms = inverse @ means
    rest = means - basis @ terms
    leverage = np.einsum("ij,ji->i", basis, inverse)
    weighed = rest / (1.0 - np.minimum(leverage, 0.99))
    covariance = (inverse * weighed**2) @ inverse.T * student(len(means) - TERMS) ** 2
    return FieldFit(terms, covariance, rest, blocks @ inverse.T)


def gather(
    planes: list[Floats] | NDArray[np.generic],
    centers_mm: Floats,
    radius_mm: float,
    spacing_mm: tuple[float, float],
    cells: Cells,
    rotation_mm: tuple[float, float],
) -> Field | NotMeasured:
    """Sum up the slices, and refuse a field that holds something else than one material.

    Parameters
    ----------
    planes : sequence of ndarray, each of shape (ny, nx)
        The slices.
    centers_mm : ndarray, shape (slices, 2)
        y and x of the axis in each.
    radius_mm : float
        Of the cylinder.
    spacing_mm : (float, float)
        dy and dx.
    cells : Cells
        The field.
    rotation_mm : (float, float)
        y and x of the centre of rings.
    """
    first = FEWEST_SECTORS * ARC_PIXELS / (2 * np.pi) * max(spacing_mm) / radius_mm
    width = max(max(spacing_mm) / radius_mm, cells.field / 60)
    edges = np.arange(first, cells.field, width)
    edges = np.append(edges[: max(len(edges), 2) - 1], cells.field)
    found, circles, parts = [], [], []
    frame: _Frame | None = None
    for plane, center in zip(planes, centers_mm, strict=True):
        shape = (plane.shape[0], plane.shape[1])
        if frame is None or not np.array_equal(center, frame.center):
            frame = _Frame(shape, center, radius_mm, spacing_mm, cells, edges, rotation_mm)
        values = np.asarray(plane, dtype=float).ravel()[frame.pixels]
        sums = frame.sums(values)
        if isinstance(sums, NotMeasured):
            return sums
        found.append((*sums, frame.basis, frame.distance))
        circles.append(frame.circles)
        parts.append(np.bincount(frame.pair, values).astype(float))
    stacked = [np.stack(part) for part in zip(*found, strict=True)]
    means, inner, profile, basis, distances = stacked
    clean = clean_field(circles, parts, cells.count)
    return Field(means, basis, inner, profile, distances.mean(axis=0), clean)


class _Frame:
    """The pixels of one slice's field: their cells, rings and sectors."""

    def __init__(
        self,
        shape: tuple[int, int],
        center: Floats,
        radius_mm: float,
        spacing_mm: tuple[float, float],
        cells: Cells,
        edges: Floats,
        rotation_mm: tuple[float, float],
    ) -> None:
        self.center, self.cells, self.bins = center, cells, len(edges) - 1
        y = (np.arange(shape[0]) * spacing_mm[0] - center[0])[:, None] / radius_mm
        x = (np.arange(shape[1]) * spacing_mm[1] - center[1])[None, :] / radius_mm
        everywhere = np.hypot(y, x).ravel()
        self.pixels = np.flatnonzero(everywhere <= cells.field)
        y, x = (np.broadcast_to(v, shape).ravel()[self.pixels] for v in (y, x))
        r = everywhere[self.pixels]
        angle = np.mod(np.arctan2(-y, x), 2 * np.pi)
        self.label = cells.labels(r, angle)
        self.count = np.bincount(self.label, minlength=cells.count)
        pixel = max(spacing_mm) / radius_mm
        number = np.clip((2 * np.pi * edges[:-1] / (ARC_PIXELS * pixel)).astype(int), 1, SECTORS)
        self.used = r >= edges[0]
        ring = np.clip(np.searchsorted(edges, r[self.used], side="right") - 1, 0, self.bins - 1)
        turn = angle[self.used] / (2 * np.pi)
        sector = np.minimum((turn * number[ring]).astype(np.intp), number[ring] - 1)
        self.place = ring * SECTORS + sector
        self.held = np.bincount(self.place, minlength=self.bins * SECTORS)
        total = np.bincount(ring, r[self.used], minlength=self.bins)
        self.distance = total / np.bincount(ring, minlength=self.bins)
        self.terms = np.stack([np.ones(len(r)), x, y, *_bowls(r)], axis=1)
        self.basis = np.stack([self._mean(t) for t in self.terms.T], axis=1)
        self.pair, self.circles = self._circles(shape, spacing_mm, rotation_mm)

    def _circles(
        self,
        shape: tuple[int, int],
        spacing_mm: tuple[float, float],
        rotation_mm: tuple[float, float],
    ) -> tuple[NDArray[np.intp], Circles]:
        y, x = (
            np.arange(n) * s - c for n, s, c in zip(shape, spacing_mm, rotation_mm, strict=True)
        )
        away = np.hypot(y[:, None], x[None, :]).ravel()[self.pixels]
        circle = np.floor(away / max(spacing_mm)).astype(np.intp)
        kinds, pair = np.unique(circle * self.cells.count + self.label, return_inverse=True)
        count = np.bincount(pair).astype(float)
        basis = np.stack([np.bincount(pair, t).astype(float) for t in self.terms.T], axis=1)
        return pair, Circles(kinds % self.cells.count, kinds // self.cells.count, count, basis)

    def _mean(self, values: Floats) -> Floats:
        found: Floats = np.bincount(self.label, values, minlength=self.cells.count) / self.count
        return found

    def sums(self, values: Floats) -> tuple[Floats, Floats, Floats] | NotMeasured:
        if not np.isfinite(values).all():
            return NotMeasured(
                "the cylinder holds values that are not finite", "choose other slices"
            )
        means = self._mean(values)
        rest = values - self.terms @ (np.linalg.pinv(self.basis) @ means)
        spread = 1.4826 * float(np.median(np.abs(rest - np.median(rest))))
        # whole numbers of little noise have no spread to speak of
        outside = float(np.mean(np.abs(rest) > OUTLYING * max(spread, 1.0)))
        if outside > OUTLYING_SHARE:
            return NotMeasured(
                f"{100 * outside:.2g} % of the cylinder's pixels are not like the rest of it:"
                " inserts, a thick wall, or an object",
                "choose slices of one material, or a smaller field",
            )
        centred = values - means[self.label]
        inner = np.sqrt(self._mean(centred**2) * self.count / np.maximum(self.count - 1, 1))
        total = np.bincount(self.place, values[self.used], minlength=self.bins * SECTORS)
        with np.errstate(invalid="ignore"):
            profile = (total / self.held).reshape(self.bins, SECTORS)
        return means, inner, profile
