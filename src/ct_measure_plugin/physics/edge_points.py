"""Points of a slice where values rise fastest, clear of the noise, and how they hang together."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import ndimage, sparse, spatial
from skimage import feature

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]
    Flags = NDArray[np.bool_]
    Whole = NDArray[np.intp]

__all__ = ["EdgePoints", "Rise", "find_edge_points", "level_in_blocks", "rise_across"]

#: Gradient over its noise: a chain of points needs one above the first, all above the second.
SURE, POSSIBLE = 6.0, 3.5

#: Gradients below this share of the slice's largest are left alone where there is no noise.
LEAST_SHARE = 0.002

#: Side in pixels of the blocks whose low gradients are taken for the noise, and how low: of a block
#: with an edge through it, a fifth of the pixels lie away from the edge.
BLOCK, LOW_SHARE = 32, 0.2

#: Rayleigh's distribution: its 20 % quantile over the SD of either component.
RAYLEIGH_LOW = math.sqrt(-2 * math.log(1 - LOW_SHARE))

#: Half of the 5 by 5 neighbourhood: points so near to each other hang together.
NEIGHBOURS = tuple((i, j) for i in range(3) for j in range(-2, 3) if (i, j) > (0, 0))


@dataclass(frozen=True, slots=True, eq=False)
class EdgePoints:
    """Points on edges.

    Attributes
    ----------
    y, x : ndarray, shape (n,)
        Places in mm from the centre of pixel (0, 0), to a fraction of a pixel.
    normal : ndarray, shape (n,)
        Direction in which the values rise, radians from +x towards +y (down the image).
    over_noise : ndarray, shape (n,)
        Gradient over its noise.
    step : ndarray, shape (n,)
        About by how much the values rise, if the edge is sharp.
    pairs : ndarray of int, shape (2, m)
        Points that are neighbours.
    """

    y: Floats
    x: Floats
    normal: Floats
    over_noise: Floats
    step: Floats
    pairs: Whole

    def __len__(self) -> int:
        return len(self.y)

    def chains(self, joined: Flags | None = None) -> Whole:
        """Return for every point the number of its chain; `joined` tells which pairs count."""
        first, second = self.pairs if joined is None else self.pairs[:, joined]
        graph = sparse.coo_array((np.ones(len(first)), (first, second)), shape=(len(self),) * 2)
        found: Whole = sparse.csgraph.connected_components(graph, directed=False)[1]
        return found

    def only(self, kept: Flags) -> EdgePoints:
        """Return some of the points, with the pairs among them."""
        number = np.cumsum(kept) - 1
        pairs = number[self.pairs[:, kept[self.pairs].all(axis=0)]]
        y, x, normal = self.y[kept], self.x[kept], self.normal[kept]
        return EdgePoints(y, x, normal, self.over_noise[kept], self.step[kept], pairs)

    def away_from(self, other: EdgePoints, least_mm: float) -> Flags:
        """Tell which points lie at least so far from every point of others."""
        if not (len(self) and len(other)):
            return np.ones(len(self), dtype=bool)
        tree = spatial.cKDTree(np.column_stack([other.y, other.x]))
        near, _ = tree.query(np.column_stack([self.y, self.x]), distance_upper_bound=least_mm)
        found: Flags = ~np.isfinite(near)
        return found


def find_edge_points(
    image: Floats, spacing_mm: tuple[float, float], *, scale_px: float, mask: Flags | None = None
) -> EdgePoints:
    """Return the points of a slice where its gradient is largest along its own direction.

    Parameters
    ----------
    image : ndarray, shape (ny, nx)
        The slice.
    spacing_mm : (float, float)
        dy, dx.
    scale_px : float
        SD of the Gaussian that smooths before, pixels.
    mask : ndarray of bool, optional
        False where there is nothing to look at.

    Notes
    -----
    Canny 1986, IEEE Trans. PAMI 8:679, with thresholds in terms of the noise: the gradient of
    noise has Rayleigh's distribution, and its low values in blocks of 32 pixels tell its SD.
    """
    smooth = ndimage.gaussian_filter(image, scale_px, mode="nearest")
    gradient = list(np.gradient(smooth, *spacing_mm))
    size = np.hypot(*gradient)
    floor = LEAST_SHARE * float(size.max(initial=0.0)) or 1.0
    noise = np.maximum(level_in_blocks(size, mask) / RAYLEIGH_LOW, floor)
    ridge = feature.canny(smooth, 0.0, low_threshold=0.0, high_threshold=0.0, mask=mask)
    row, column = np.nonzero(ridge & (size > POSSIBLE * noise))
    points = EdgePoints(
        *_refined(size, gradient, row, column, spacing_mm),
        (size / noise)[row, column],
        # of a Gaussian edge as wide as the smoothing
        size[row, column] * math.sqrt(2 * math.pi) * scale_px * min(spacing_mm),
        _pairs(row, column, image.shape),
    )
    chain = points.chains()
    best = np.zeros(int(chain.max(initial=-1)) + 1)
    np.maximum.at(best, chain, points.over_noise)
    return points.only(best[chain] >= SURE)


def level_in_blocks(size: Floats, mask: Flags | None = None) -> Floats:
    """Return the 20 % quantile of positive numbers in the blocks about every pixel.

    A block full of objects takes its neighbours' level; an empty one, all zero, half of it.
    """
    ny, nx = (max(1, round(n / BLOCK)) for n in size.shape)
    held = size if mask is None else np.where(mask, size, np.nan)
    rows = np.array_split(np.arange(size.shape[0]), ny)
    columns = np.array_split(np.arange(size.shape[1]), nx)
    lows = np.array([[_low(held[np.ix_(r, c)]) for c in columns] for r in rows])
    known = lows > 0
    if not known.any():
        return np.zeros(size.shape)
    typical = float(np.median(lows[known]))
    level = ndimage.median_filter(np.where(known, lows, typical), 3, mode="nearest")
    level = np.clip(lows, 0.5 * level, level)
    down, right = (_between(n, m) for n, m in zip(size.shape, level.shape, strict=True))
    found: Floats = down @ level @ right.T
    return found


def _between(pixels: int, blocks: int) -> Floats:
    """Return the weights, shape (pixels, blocks), of linear interpolation between blocks."""
    place = np.clip((np.arange(pixels) + 0.5) * blocks / pixels - 0.5, 0, blocks - 1)
    weights: Floats = np.maximum(0.0, 1 - np.abs(place[:, None] - np.arange(blocks)))
    return weights


def _low(block: Floats) -> float:
    kept = block[np.isfinite(block)]
    if not kept.size:
        return 0.0
    place = int(LOW_SHARE * (kept.size - 1))
    return float(np.partition(kept, place, axis=None)[place])


def _refined(
    size: Floats,
    gradient: list[Floats],
    row: Whole,
    column: Whole,
    spacing_mm: tuple[float, float],
) -> tuple[Floats, Floats, Floats]:
    """Return y, x and normal of points moved to the top of the gradient along the normal."""
    ny, nx = gradient[0][row, column] / spacing_mm[0], gradient[1][row, column] / spacing_mm[1]
    length = np.maximum(np.hypot(ny, nx), 1e-300)
    ny, nx = ny / length, nx / length  # in pixels
    before, after = (
        ndimage.map_coordinates(size, [row + s * ny, column + s * nx], order=1, mode="nearest")
        for s in (-1.0, 1.0)
    )
    middle = size[row, column]
    bend = before - 2 * middle + after
    step = np.where(bend < 0, 0.5 * (before - after) / np.where(bend < 0, bend, -1.0), 0.0)
    step = np.clip(step, -0.7, 0.7)
    normal: Floats = np.arctan2(gradient[0][row, column], gradient[1][row, column])
    return (row + step * ny) * spacing_mm[0], (column + step * nx) * spacing_mm[1], normal


def _pairs(row: Whole, column: Whole, shape: tuple[int, ...]) -> Whole:
    number = np.full((shape[0] + 4, shape[1] + 4), -1, dtype=np.intp)
    number[row + 2, column + 2] = np.arange(len(row))
    found = []
    for down, right in NEIGHBOURS:
        other = number[row + 2 + down, column + 2 + right]
        first = np.flatnonzero(other >= 0)
        found.append(np.stack([first, other[first]]))
    return np.concatenate(found, axis=1)


@dataclass(frozen=True, slots=True)
class Rise:
    """What the mean profile across an edge shows.

    Attributes
    ----------
    contrast : float
        The values beyond less those before.
    fwhm : float
        Full width at half maximum of the line spread function, mm, as of a Gaussian edge.
    noise : float
        SD of the values about the mean profile, away from the edge.
    """

    contrast: float
    fwhm: float
    noise: float

    def doubt(self, length_mm: float, pixel_area: float) -> float:
        """Return the relative uncertainty of the width of so long an edge.

        The Cramér-Rao bound of a Gaussian edge in independent noise,
        sqrt(4 sqrt(π) pixel area / (length σ)) noise / contrast: the least that is possible.
        """
        share = 4 * math.sqrt(math.pi) * pixel_area / (length_mm * self.fwhm / 2.3548)
        return self.noise / self.contrast * math.sqrt(share)


def rise_across(
    image: Floats, spacing_mm: tuple[float, float], points: EdgePoints, reach_mm: float
) -> Rise | None:
    """Return the mean profile's contrast, width and noise, or None if it does not rise.

    Every point's profile is taken along its own normal to the reach on either side, its values
    interpolated linearly; the width follows from the steepest slope.
    """
    pixel = min(spacing_mm)
    count = max(4, round(2 * reach_mm / pixel))
    offset = np.linspace(-reach_mm, reach_mm, 2 * count + 1)
    y = points.y[:, None] + np.sin(points.normal)[:, None] * offset
    x = points.x[:, None] + np.cos(points.normal)[:, None] * offset
    values = ndimage.map_coordinates(
        image, [y / spacing_mm[0], x / spacing_mm[1]], order=1, mode="nearest"
    )
    mean = np.median(values, axis=0)
    end = max(1, count // 3)
    outer = np.r_[:end, -end:0]
    contrast = float(mean[-end:].mean() - mean[:end].mean())
    step = float(offset[1] - offset[0])
    slope = float(((mean[2:] - mean[:-2]) / (2 * step))[count // 2 : -count // 2].max(initial=0.0))
    if not (contrast > 0 and slope > 0):
        return None
    sigma = contrast / (math.sqrt(2 * math.pi) * slope)
    # the chord of two steps and the interpolation widen the slope, in quadrature
    own = (2 * step) ** 2 / 12 + pixel**2 / 6
    width = 2.3548 * math.sqrt(max(sigma**2 - own, (0.3 * pixel) ** 2))
    return Rise(contrast, width, float(np.std((values - mean)[:, outer])))
