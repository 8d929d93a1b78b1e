"""Pixels sorted by their signed distance to an edge: the oversampled edge spread function."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import interpolate

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["EdgeBins", "bin_by_distance"]


@dataclass(frozen=True, slots=True, eq=False)
class EdgeBins:
    """Means of the pixels in equal steps of distance; steps that hold no pixel are left out.

    Attributes
    ----------
    index : ndarray of int, shape (n,)
        Number of the step; its middle lies at ``index * width``.
    count : ndarray, shape (n,)
        Pixels in it.
    distance, spread : ndarray, shape (n,)
        Mean and variance of their distances, in mm and mm².
    value : ndarray, shape (n,)
        Their mean.
    width : float
        Width of a step in mm.
    """

    index: NDArray[np.intp]
    count: Floats
    distance: Floats
    spread: Floats
    value: Floats
    width: float

    def largest_gap(self, reach: float) -> float:
        """Return the widest gap between neighbouring means of distance within ± reach."""
        near = self.distance[np.abs(self.distance) <= reach]
        if len(near) < 2:
            return 2 * reach
        return float(np.diff(near).max())

    def evenly(self, half: float) -> tuple[Floats, Floats]:
        """Return steps from -half to half and the values at their middles.

        Between the mean distances by modified Akima interpolation, a local cubic; beyond the first
        and the last one their values.
        """
        n = int(half / self.width)
        middles: Floats = np.arange(-n, n + 1, dtype=np.float64) * self.width
        curve = interpolate.Akima1DInterpolator(self.distance, self.value, method="makima")
        within = np.clip(middles, self.distance[0], self.distance[-1])
        return middles, np.asarray(curve(within), dtype=np.float64)

    def averaged(self, reach: float) -> float:
        """Return the width of the boxes over which pixels are averaged near the edge, mm.

        Pixels spread evenly over a step of width h have the variance h²/12; pixels that crowd at
        one place of it, as they do at some angles, have less.
        """
        near = np.abs(self.distance) <= reach
        if not near.any():
            return self.width
        return float(np.sqrt(12 * np.mean(self.spread[near])))


def bin_by_distance(
    distance: Floats, value: Floats, width: float, *, half: float, least_share: float = 0.15
) -> EdgeBins:
    """Return bins of pixels by distance.

    Parameters
    ----------
    distance, value : ndarray, shape (n,)
        Signed distance to the edge in mm and value of each pixel.
    width : float
        Width of a bin in mm; bin k spans (k ± 1/2) width.
    half : float
        Largest distance used.
    least_share : float
        Bins with fewer pixels than this share of the median bin are left out: corners of the box.

    Examples
    --------
    >>> bins = bin_by_distance(np.array([-0.1, 0.1, 0.9]), np.array([1.0, 3.0, 8.0]), 1.0, half=2)
    >>> bins.index, bins.value
    (array([0, 1]), array([2., 8.]))
    """
    n = int(half / width)
    k = np.rint(distance / width).astype(np.intp) + n
    used = (k >= 0) & (k <= 2 * n)
    if not used.all():
        k, distance, value = k[used], distance[used], value[used]
    size = 2 * n + 1
    count = np.bincount(k, minlength=size).astype(float)
    filled = count > 0
    if filled.any():
        filled = count > least_share * float(np.median(count[filled]))
    full = count[filled]
    mean = np.bincount(k, distance, size)[filled] / full
    spread = np.bincount(k, distance**2, size)[filled] / full - mean**2
    return EdgeBins(
        np.flatnonzero(filled) - n,
        full,
        mean,
        np.maximum(spread, 0.0),
        np.bincount(k, value, size)[filled] / full,
        width,
    )
