"""A ring fitted and taken out of polar means, so that its side lobes are not taken for others."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy import fft, ndimage

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.ring_polar import Polar

    Floats = NDArray[np.float64]

__all__ = ["ring_model"]

#: Steps to either side of a ring's middle at which its profile is free, and over which it is
#: fitted.
FREE, FITTED = 4, 20

#: Combinations of shapes that the steps tell apart less well than this, of the best, are left out.
LEAST_TOLD = 0.05


def ring_model(
    polar: Polar, means: Floats, power: Floats, taps: Floats, step: int, sectors: NDArray[np.intp]
) -> Floats:
    """Return the ring at a step as a profile along the radius times a strength by sector.

    Parameters
    ----------
    polar : Polar
        The geometry.
    means : ndarray, shape (steps, sectors)
        Polar means, less their smooth course.
    power, taps : ndarray
        The noise's power along the radius, and the filter that whitens it.
    step : int
        Where the ring's middle lies.
    sectors : ndarray of int
        Where its arc lies.

    Returns
    -------
    ndarray, shape (steps, sectors)

    Notes
    -----
    The kernel that shapes the noise shapes the ring: its profile is the root of the noise's power,
    as it is and an eighth and a quarter of a turn out of phase (its Hilbert transform), at the
    nine steps about the middle; these carry the tails. They are fitted to the arc behind the
    whitening filter, then every sector to the profile.
    """
    shapes = _shapes(power, len(means), step)
    rows = np.arange(max(step - FITTED, 0), min(step + FITTED + 1, len(means)))
    weight = polar.count[:, sectors]
    held = weight.sum(axis=1)
    arc = np.sum(means[:, sectors] * weight, axis=1) / np.maximum(held, 1.0)
    seen = (held > 0)[rows]
    white = _filtered(shapes, taps)[rows] * seen[:, None]
    terms, *_ = np.linalg.lstsq(white, _filtered(arc, taps)[rows] * seen, rcond=LEAST_TOLD)
    profile = shapes @ terms
    behind = (white @ terms)[:, None] * (polar.count[rows] > 0)
    top = np.sum(_filtered(means, taps)[rows] * behind, axis=0)
    bottom = np.sum(behind**2, axis=0)
    strength = top / np.where(bottom > 0, bottom, np.inf)
    found: Floats = profile[:, None] * strength * (polar.count > 0)
    return found


def _shapes(power: Floats, steps: int, step: int) -> Floats:
    """Return the shapes a ring's profile is made of, shape (steps, shapes)."""
    root = np.sqrt(power)
    even = fft.irfft(root)
    odd = fft.irfft(-1j * root)
    reach = min(steps, len(even) // 2 - 1)
    lag = np.arange(-reach, reach + 1)
    offset = np.arange(steps) - step
    columns = []
    for wave in (even, odd):
        for j in range(-FREE, FREE + 1):
            columns.append(np.interp(offset - j, lag, wave[lag], left=0.0, right=0.0))
    return np.stack(columns, axis=1)


def _filtered(values: Floats, taps: Floats) -> Floats:
    found: Floats = ndimage.correlate1d(values, taps, axis=0, mode="constant")
    return found
