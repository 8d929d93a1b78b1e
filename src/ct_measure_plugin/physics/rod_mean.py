"""The CT number of one rod from its pixels, and whether its middle and its border agree."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import ndimage

from ct_measure_plugin.physics.first_order import moments
from ct_measure_plugin.physics.noise_correlation import doubt_of_mean
from ct_measure_plugin.physics.quantisation import resolution_of
from ct_measure_plugin.physics.region_numbers import mean_and_sd
from ct_measure_plugin.physics.results import Quantity

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["RodMean", "rod_mean"]

#: Parts of a region: within so much of its largest depth from the border, and beyond so much.
OUTER_DEPTH, INNER_DEPTH = 0.25, 0.4

#: Difference of the parts, in standard uncertainties, beyond which noise does not explain it: with
#: ten rods by chance once in 170,000 lines.
UNEVEN_SIGMA = 5.0

#: A smaller difference is of no consequence beside densities, HU.
LEAST_UNEVEN_HU = 2.0


@dataclass(frozen=True, slots=True)
class RodMean:
    """What a rod reads.

    Attributes
    ----------
    mean : Quantity
        CT number, HU, with the standard error of correlated noise.
    step : Quantity or None
        Outer part minus inner part, HU; None for a region too small to have parts.
    """

    mean: Quantity
    step: Quantity | None

    @property
    def uneven(self) -> bool:
        """True if the outer part differs from the inner by more than noise allows."""
        if self.step is None:
            return False
        limit = max(UNEVEN_SIGMA * (self.step.uncertainty or 0.0), LEAST_UNEVEN_HU)
        return abs(self.step.value) > limit


def rod_mean(values: Floats, weights: Floats, *, spacing_mm: tuple[float, ...]) -> RodMean:
    """Return the CT number of a rod.

    Parameters
    ----------
    values, weights : ndarray, shape (ny, nx) or (nz, ny, nx)
        CT numbers and coverage, 0 outside the region.
    spacing_mm : tuple of float
        Step along each axis.

    Returns
    -------
    RodMean

    Notes
    -----
    The parts are told apart by the distance to the nearest pixel outside, slice by slice. Their
    difference is judged by the sample variance over the number of independent samples that the
    variance sees, which for the noise of filtered backprojection is too large rather than too
    small. The samples are counted after a cubic in the depth is taken off: a border in the region
    is a structure, not smooth noise.

    Examples
    --------
    >>> disc = (np.hypot(*np.mgrid[-10:11, -10:11]) < 9).astype(float)
    >>> found = rod_mean(120 * np.ones((21, 21)), disc, spacing_mm=(0.5, 0.5))
    >>> str(found.mean), found.uneven
    ('120.00 ± 0.29 HU', False)
    """
    inside = weights > 0
    v, w = values[inside], weights[inside]
    doubt = doubt_of_mean(values, weights, spacing_mm)
    mean, error, sd, _ = mean_and_sd(moments(v, w), v.size, doubt, resolution_of(v))
    depth = _depth(inside, spacing_mm)
    outer = inside & (depth <= OUTER_DEPTH * depth.max())
    inner = inside & (depth >= INNER_DEPTH * depth.max())
    step = None
    if outer.sum() > 8 and inner.sum() > 8:
        shares = [float(weights[part].sum()) / float(w.sum()) for part in (outer, inner)]
        samples = _samples(values, weights, depth, spacing_mm)
        u_step = sd * math.sqrt(sum(1 / (share * samples) for share in shares))
        means = [float(np.average(values[p], weights=weights[p])) for p in (outer, inner)]
        step = Quantity(means[0] - means[1], "HU", u_step)
    return RodMean(Quantity(mean, "HU", error), step)


def _samples(
    values: Floats, weights: Floats, depth: Floats, spacing_mm: tuple[float, ...]
) -> float:
    """Return the independent samples of what is left when a cubic in the depth is taken off."""
    inside = weights > 0
    cubic = np.polynomial.Polynomial.fit(depth[inside], values[inside], 3, w=weights[inside])
    left = np.where(inside, values - cubic(depth), 0.0)
    return doubt_of_mean(left, weights, spacing_mm).power_samples


def _depth(inside: NDArray[np.bool_], spacing_mm: tuple[float, ...]) -> Floats:
    """Return the distance of each pixel to the nearest one outside, in its slice, mm."""
    flat = inside if inside.ndim == 3 else inside[None]
    padded = np.pad(flat, ((0, 0), (1, 1), (1, 1)))
    found = [ndimage.distance_transform_edt(p, sampling=spacing_mm[-2:]) for p in padded]
    depth: Floats = np.stack(found)[:, 1:-1, 1:-1].reshape(inside.shape)
    return depth
