"""What the cells of a cylinder's field tell: cup, shading, radial profile, and what is no water."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.results import NotMeasured
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
    """

    means: Floats
    basis: Floats
    inner_sd: Floats
    profile: Floats
    distance: Floats


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
    """

    terms: Floats
    covariance: Floats
    rest: Floats

    def cup(self, at: float) -> tuple[float, float]:
        """Return H(at) − H(0) without shading, and its standard uncertainty."""
        return self._of(np.array([0.0, 0.0, 0.0, *_bowls(at)]))

    def shading(self, at: float) -> tuple[float, float]:
        """Return the difference across the diameter 2·at along the steepest direction."""
        x, y = self.terms[1], self.terms[2]
        size = math.hypot(x, y)
        if size == 0:
            return 0.0, 2 * at * math.sqrt(max(self.covariance[1, 1], self.covariance[2, 2]))
        return self._of(2 * at * np.array([0.0, x / size, y / size, 0.0, 0.0, 0.0]))

    def radial(self, r: Floats) -> Floats:
        """Return the fit without shading at distances r."""
        found: Floats = self.terms[0] + np.tensordot(self.terms[3:], _bowls(r), axes=1)
        return found

    def _of(self, by: Floats) -> tuple[float, float]:
        return float(by @ self.terms), math.sqrt(max(float(by @ self.covariance @ by), 0.0))


def _bowls(r: Floats | float) -> Floats:
    """Return 1 − qⁿ for n = 1, 2, 3, shape (3, …)."""
    q = np.sqrt(1.0 - np.asarray(r) ** 2)
    return np.stack([1.0 - q, 1.0 - q**2, 1.0 - q**3])


def cell_fit(means: Floats, basis: Floats) -> FieldFit:
    """Fit the cells' means, shape (cells,), with their basis means, shape (cells, 6).

    The covariance is White's with the leverage taken out twice (HC3: J. G. MacKinnon and H. White,
    J. Econometrics 29 (1985) 305): cells in the middle of a cylinder are noisier than at its rim.
    """
    inverse = np.linalg.pinv(basis)
    terms = inverse @ means
    rest = means - basis @ terms
    leverage = np.einsum("ij,ji->i", basis, inverse)
    weighed = rest / (1.0 - np.minimum(leverage, 0.99))
    covariance = (inverse * weighed**2) @ inverse.T * student(len(means) - TERMS) ** 2
    return FieldFit(terms, covariance, rest)


def gather(
    planes: list[Floats] | NDArray[np.generic],
    centers_mm: Floats,
    radius_mm: float,
    spacing_mm: tuple[float, float],
    cells: Cells,
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
    """
    first = FEWEST_SECTORS * ARC_PIXELS / (2 * np.pi) * max(spacing_mm) / radius_mm
    width = max(max(spacing_mm) / radius_mm, cells.field / 60)
    edges = np.arange(first, cells.field, width)
    edges = np.append(edges[: max(len(edges), 2) - 1], cells.field)
    found = []
    frame: _Frame | None = None
    for plane, center in zip(planes, centers_mm, strict=True):
        shape = (plane.shape[0], plane.shape[1])
        if frame is None or not np.array_equal(center, frame.center):
            frame = _Frame(shape, center, radius_mm, spacing_mm, cells, edges)
        sums = frame.sums(np.asarray(plane, dtype=float))
        if isinstance(sums, NotMeasured):
            return sums
        found.append((*sums, frame.basis, frame.distance))
    stacked = [np.stack(part) for part in zip(*found, strict=True)]
    means, inner, profile, basis, distances = stacked
    return Field(means, basis, inner, profile, distances.mean(axis=0))


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

    def _mean(self, values: Floats) -> Floats:
        found: Floats = np.bincount(self.label, values, minlength=self.cells.count) / self.count
        return found

    def sums(self, plane: Floats) -> tuple[Floats, Floats, Floats] | NotMeasured:
        values = plane.ravel()[self.pixels]
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
