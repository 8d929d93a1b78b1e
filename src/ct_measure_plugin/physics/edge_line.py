"""Where a straight edge lies in a box, to a small fraction of a pixel, from the pixels alone."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import special

from ct_measure_plugin.physics.edge_bins import EdgeBins, bin_by_distance
from ct_measure_plugin.physics.results import NotMeasured

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["EdgeLine", "RoughEsf", "locate_edge", "pixel_grid", "rough_esf"]

#: Steps of the search for position and angle; it converges in three or four.
MOST_STEPS = 9

#: A step of fewer pixels, or of a hundredth as many radians, is the last: the next one would be
#: some ten times smaller.
SETTLED = 1e-3

#: Half-width in sigma of the band about the edge that the search looks at.
NEAR = 18.0


@dataclass(frozen=True, slots=True, eq=False)
class RoughEsf:
    """A Gaussian edge with a few even Hermite terms, tabulated on a fine grid of distance."""

    sigma: float
    grid: Floats
    value: Floats
    line: Floats

    def at(self, d: Floats) -> Floats:
        """Return the edge spread function at d."""
        return self._between(d, self.value)[0]

    def line_at(self, d: Floats) -> Floats:
        """Return the line spread function at d."""
        return self._between(d, self.line)[0]

    def both_at(self, d: Floats) -> tuple[Floats, Floats]:
        """Return edge and line spread function at d."""
        edge, line = self._between(d, self.value, self.line)
        return edge, line

    def _between(self, d: Floats, *tables: Floats) -> tuple[Floats, ...]:
        """Interpolate linearly on the even grid (twice as fast as np.interp)."""
        place = (d - self.grid[0]) / (self.grid[1] - self.grid[0])
        np.clip(place, 0.0, len(self.grid) - 1.000001, out=place)
        low = place.astype(np.intp)
        place -= low
        return tuple(table[low] + place * np.diff(table)[low] for table in tables)


@dataclass(frozen=True, slots=True, eq=False)
class EdgeLine:
    """A straight edge ``n · (x, y) = offset`` about the middle of the box.

    Attributes
    ----------
    angle : float
        Direction of the normal in radians, from +x towards +y (down the image); it points to the
        side of higher values.
    offset : float
        Distance of the edge from the middle of the box along the normal, mm.
    sagitta : float
        Height of the arc that the edge makes over the length of the box, mm; 0 if straight.
    rough : RoughEsf
        Shape found on the way.
    sigma : float
        Width of the best Gaussian edge, mm.
    distance, along : ndarray, shape (ny, nx)
        Signed distance to the edge and place along it of every pixel, mm.
    residual : ndarray, shape (ny, nx)
        Pixels minus the rough edge.
    jacobian : ndarray, shape (5, ny, nx)
        Derivatives of the pixels by offset and by angle, and by level, slope and step of the edge.
    """

    angle: float
    offset: float
    sagitta: float
    sagitta_doubt: float
    rough: RoughEsf
    sigma: float
    distance: Floats
    along: Floats
    residual: Floats
    jacobian: Floats

    @property
    def length(self) -> float:
        """Length of the edge within the box, mm."""
        near = np.abs(self.distance) <= 2 * self.sigma
        return float(np.ptp(self.along[near])) if near.any() else 0.0


def pixel_grid(shape: tuple[int, int], spacing_mm: tuple[float, float]) -> tuple[Floats, Floats]:
    """Return y and x of pixel centres about the middle of the box, shapes (ny, 1) and (1, nx)."""
    y: Floats = (np.arange(shape[0], dtype=np.float64) - (shape[0] - 1) / 2) * spacing_mm[0]
    x: Floats = (np.arange(shape[1], dtype=np.float64) - (shape[1] - 1) / 2) * spacing_mm[1]
    return y[:, None], x[None, :]


def locate_edge(image: Floats, spacing_mm: tuple[float, float]) -> EdgeLine | NotMeasured:
    """Return the edge line of a box that holds one straight edge.

    Notes
    -----
    Start: by the gradient theorem the mean gradient over the box is the sum of the border values
    times their outward normals, so its direction is the edge's normal whatever the blur. Then
    Gauss-Newton steps on position, angle and curvature, with the edge spread function fitted
    anew in each: the maximum-likelihood line for independent pixels, unbiased for others.
    """
    y, x = pixel_grid((image.shape[0], image.shape[1]), spacing_mm)
    angle, offset = _start(image, y, x, spacing_mm)
    pixel = max(spacing_mm)
    ahead: RoughEsf | None = None
    v, rows, columns = image.ravel(), *(c.ravel() for c in np.broadcast_arrays(y, x))
    for step in range(MOST_STEPS):
        d = math.cos(angle) * columns + math.sin(angle) * rows - offset
        reach = float(np.abs(d).max())
        if not float(d.min()) < 0 < float(d.max()):
            return NotMeasured("no edge was found in the box", "draw it across an edge")
        half = reach if ahead is None else min(reach, NEAR * ahead.sigma)
        width = pixel / 2 if ahead is None else max(pixel / 4, ahead.sigma / 6)
        bins = bin_by_distance(d, v, width, half=half)
        if len(bins.index) < 12:
            return NotMeasured("the box is too small to hold an edge", "draw it larger")
        ahead = rough_esf(
            bins, None if ahead is None else ahead.sigma, terms=0 if step < 2 else 3, wide=step < 4
        )
        near = np.abs(d) <= 6 * ahead.sigma
        t = (math.cos(angle) * rows - math.sin(angle) * columns)[near]
        edge, line = ahead.both_at(d[near])
        slopes = np.stack([line, line * t, line * (t * t - float(np.mean(t * t)))])
        normal = slopes @ slopes.T
        if not np.linalg.cond(normal) < 1e14:
            return NotMeasured("no edge was found in the box", "draw it across an edge")
        change = np.linalg.solve(normal, slopes @ (v[near] - edge))
        bend = max(-0.3, min(0.3, math.atan(change[1])))
        offset = (offset - change[0]) * math.cos(bend)
        angle += bend
        if step >= 3 and abs(change[0]) < SETTLED * pixel and abs(change[1]) < SETTLED / 100:
            break
        if step == 1:  # the line is known well enough to leave the far plateaus out
            kept = np.abs(d) <= 1.3 * NEAR * ahead.sigma
            v, rows, columns = v[kept], rows[kept], columns[kept]
    d = math.cos(angle) * x + math.sin(angle) * y - offset
    reach = float(np.abs(d).max())
    bins = bin_by_distance(d.ravel(), image.ravel(), pixel / 3, half=reach)
    whole = rough_esf(bins, None if ahead is None else ahead.sigma, terms=3)
    return _line(image, angle, offset, d, y, x, whole, rough_esf(bins, whole.sigma, terms=0).sigma)


def _line(
    image: Floats,
    angle: float,
    offset: float,
    d: Floats,
    y: Floats,
    x: Floats,
    rough: RoughEsf,
    sigma: float,
) -> EdgeLine:
    t = math.cos(angle) * y - math.sin(angle) * x
    edge, line = rough.both_at(d)
    residual = image - edge
    near = np.abs(d) <= 2 * sigma
    extent = float(np.ptp(t[near])) if near.any() else 0.0
    columns = np.stack([line, line * t, line * (t * t - float(np.mean(t[near] ** 2)))])
    flat = columns.reshape(3, -1)
    inverse = np.linalg.inv(flat @ flat.T)
    bend = inverse @ (flat @ residual.ravel())
    noise = float(np.mean(residual**2))
    return EdgeLine(
        angle,
        offset,
        float(bend[2]) * extent**2 / 4,
        math.sqrt(noise * float(inverse[2, 2])) * extent**2 / 4,
        rough,
        sigma,
        d,
        t,
        residual,
        np.stack([*columns[:2], np.ones_like(d), d, edge]),
    )


def _start(
    image: Floats, y: Floats, x: Floats, spacing_mm: tuple[float, float]
) -> tuple[float, float]:
    band = max(1, min(image.shape) // 16)
    gx = float(image[:, -band:].mean() - image[:, :band].mean()) * image.shape[0] * spacing_mm[0]
    gy = float(image[-band:].mean() - image[:band].mean()) * image.shape[1] * spacing_mm[1]
    angle = math.atan2(gy, gx)
    d = math.cos(angle) * x + math.sin(angle) * y
    pixel = max(spacing_mm)
    bins = bin_by_distance(d.ravel(), image.ravel(), pixel, half=float(np.abs(d).max()))
    if len(bins.index) < 9:
        return angle, 0.0
    middles = np.arange(bins.index[0], bins.index[-1] + 1) * pixel
    value = np.interp(middles, bins.distance, bins.value)
    # the step between the means of the three bins either side, weighted by what they rest on
    kernel = np.array([1, 1, 1, 0, -1, -1, -1]) / 3.0
    step = np.convolve(value, kernel, "valid")
    count = np.interp(middles, bins.distance, bins.count)[3:-3]
    best = int(np.argmax(step * np.minimum(1.0, count / np.median(count))))
    return angle, float(middles[3 + best])


def rough_esf(bins: EdgeBins, sigma: float | None, *, terms: int, wide: bool = True) -> RoughEsf:
    """Return the least-squares Gaussian-Hermite edge; sigma is searched around a first value.

    The columns are 1, d, the Gaussian edge and the integrals of He_2k(x) exp(-x²/2).
    """
    reach = float(np.abs(bins.distance).max())
    if sigma is None:
        trials = np.geomspace(bins.width, reach / 3, 18)
    else:
        trials = sigma * (np.geomspace(0.6, 1.6, 9) if wide else np.array([0.97, 1.0, 1.03]))
    _, gain = _solved(bins, trials, terms)
    s = _best_trial(trials, gain)
    (mix,), _ = _solved(bins, np.array([s]), terms)
    grid = np.linspace(-reach, reach, int(2 * reach / min(bins.width / 2, s / 8)) + 1)
    shapes, lines = (table[0] for table in _hermite_edges(grid, np.array([s]), terms, (0, 1)))
    value = mix[0] + mix[1] * grid / reach + mix[2:] @ shapes
    return RoughEsf(s, grid, value, mix[2:] @ lines)


def _solved(bins: EdgeBins, trials: Floats, terms: int) -> tuple[Floats, Floats]:
    """Return for each sigma the least-squares mix and the sum of squares that it explains."""
    reach = float(np.abs(bins.distance).max())
    edges, bends = _hermite_edges(bins.distance, trials, terms, (0, 2))
    columns: Floats = np.empty((len(trials), 3 + terms, len(bins.distance)))
    columns[:, 0] = 1.0
    columns[:, 1] = bins.distance / reach
    columns[:, 2:] = edges + 0.5 * bins.spread * bends
    weighted = columns * bins.count
    right = weighted @ bins.value
    normal: Floats = weighted @ columns.transpose(0, 2, 1)
    index = np.arange(normal.shape[1])
    normal[:, index, index] *= 1 + 1e-11
    found: Floats = np.asarray(np.linalg.solve(normal, right[..., None]), dtype=np.float64)[..., 0]
    return found, np.sum(found * right, axis=1)


def _best_trial(trials: Floats, gain: Floats) -> float:
    """Return the best sigma: the top of a parabola in log sigma through the three best trials."""
    best = int(np.argmax(gain))
    if not 0 < best < len(trials) - 1:
        return float(trials[best])
    x = np.log(trials[best - 1 : best + 2] / trials[best])
    y = gain[best - 1 : best + 2] - gain[best]
    # through (x0, y0), (0, 0), (x2, y2)
    curve = (y[0] / x[0] - y[2] / x[2]) / (x[0] - x[2])
    slope = y[0] / x[0] - curve * x[0]
    if not curve < 0:
        return float(trials[best])
    return float(trials[best] * math.exp(min(max(-slope / (2 * curve), x[0]), x[2])))


def _hermite_edges(
    d: Floats, s: Floats, terms: int, derivatives: tuple[int, ...]
) -> tuple[Floats, ...]:
    """Return the columns for each sigma, shape (len(s), 1 + terms, n), or derivatives of them."""
    x = d / s[:, None]
    gauss = np.exp(-0.5 * x * x) / math.sqrt(2 * math.pi)
    waves = [gauss, x * gauss]  # He_n(x) times the Gaussian
    for n in range(1, 2 * terms + max(derivatives) - 1):
        waves.append(x * waves[n] - n * waves[n - 1])
    found = []
    for derivative in derivatives:
        # the integral of He_n g is -He_(n-1) g, its derivative -He_(n+1) g
        sign = 1.0 if derivative == 1 else -1.0
        shift = derivative - 1
        table = np.empty((len(s), 1 + terms, len(d)))
        table[:, 0] = special.ndtr(x) if derivative == 0 else sign * waves[shift]
        for k in range(1, terms + 1):
            np.multiply(
                waves[2 * k + shift], sign / math.sqrt(math.factorial(2 * k)), out=table[:, k]
            )
        if derivative:
            table /= s[:, None, None] ** derivative
        found.append(table)
    return tuple(found)
