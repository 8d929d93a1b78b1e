"""Circular rods on a slice: where something round of the right size stands out, to sub-pixel."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import ndimage, optimize, signal, special

from ct_measure_plugin.physics.noise_correlation import doubt_of_mean

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["Candidate", "disc_means", "find_candidates"]

#: Disc inside a rod and ring outside it, in radii, whose difference is its contrast.
_INSIDE, _RING = 0.7, (1.3, 1.7)

#: Contrast over the unevenness of disc and ring from which a place is looked at.
_STANDS_OUT = 2.0

#: Radius may differ by this share from the rod that is looked for.
_RADIUS_SHARE = 0.2

#: Contrast in its own standard uncertainties below which a circle is not believed.
_SURE = 6.0

#: Places looked at, at most.
MOST_CANDIDATES = 60


@dataclass(frozen=True, slots=True)
class Candidate:
    """A round object.

    Attributes
    ----------
    center : (float, float)
        y and x, mm from the centre of the image's first pixel.
    u_center : float
        Standard uncertainty of either coordinate, mm.
    radius : float
        At the middle of its edge, mm.
    contrast : float
        Against its surroundings, HU.
    """

    center: tuple[float, float]
    u_center: float
    radius: float
    contrast: float


def _disc(
    radius: float, spacing: tuple[float, float], inner: float = 0.0
) -> tuple[Floats, tuple[int, int]]:
    """Return the weights of a disc or ring, normalised, and half its extent in pixels."""
    half = (math.ceil(radius / spacing[0]), math.ceil(radius / spacing[1]))
    y, x = np.mgrid[-half[0] : half[0] + 1, -half[1] : half[1] + 1]
    r = np.hypot(y * spacing[0], x * spacing[1])
    weights = ((r <= radius) & (r >= inner)).astype(float)
    return weights / weights.sum(), half


def _mean(image: Floats, radius: float, spacing: tuple[float, float], inner: float = 0.0) -> Floats:
    weights, half = _disc(radius, spacing, inner)
    padded = np.pad(image, [(half[0],) * 2, (half[1],) * 2], mode="edge")
    found: Floats = signal.fftconvolve(padded, weights, mode="valid")
    return found


def disc_means(image: Floats, radius: float, spacing: tuple[float, float]) -> Floats:
    """Return the mean of a rod's inside about every pixel, shape of the image."""
    return _mean(image, _INSIDE * radius, spacing)


def find_candidates(
    image: Floats, spacing: tuple[float, float], radii: Sequence[float]
) -> list[Candidate]:
    """Return the round objects of given radii, the clearest first.

    Parameters
    ----------
    image : ndarray, shape (ny, nx)
        CT numbers.
    spacing : (float, float)
        dy, dx, mm.
    radii : sequence of float
        Radii looked for, mm.

    Notes
    -----
    A place stands out where the mean of a disc differs from that of a ring around it by more than
    either is uneven. There the edge of a blurred disc is fitted by least squares in level,
    contrast, centre, radius and width. The uncertainty of the centre is that of the fit, enlarged
    for the correlation of the residuals' noise.
    """
    found: list[Candidate] = []
    for radius in sorted(set(radii)):
        for y, x in _places(image, spacing, radius):
            one = _fitted(image, spacing, (y, x), radius)
            if one is not None:
                found.append(one)
    found.sort(key=lambda one: one.u_center)
    kept: list[Candidate] = []
    for one in found:
        if all(math.dist(one.center, other.center) > other.radius for other in kept):
            kept.append(one)
    return kept


def _places(image: Floats, spacing: tuple[float, float], radius: float) -> list[tuple[float, ...]]:
    smooth = ndimage.gaussian_filter(image, [0.25 * radius / step for step in spacing])
    inner = _mean(smooth, _INSIDE * radius, spacing)
    near, far = (share * radius for share in _RING)
    ring = _mean(smooth, far, spacing, near)
    uneven = (
        _mean(smooth**2, _INSIDE * radius, spacing)
        - inner**2
        + _mean(smooth**2, far, spacing, near)
        - ring**2
    )
    score = np.abs(inner - ring) / np.sqrt(np.maximum(uneven, 1e-6) + 1.0)
    size = [max(3, 2 * round(0.5 * radius / step) + 1) for step in spacing]
    peaks = (score == ndimage.maximum_filter(score, size=size)) & (score > _STANDS_OUT)
    places = np.argwhere(peaks)
    best = np.argsort(-score[peaks])[:MOST_CANDIDATES]
    return [tuple((places[k] * spacing).tolist()) for k in best]


def _fitted(
    image: Floats, spacing: tuple[float, float], start: tuple[float, ...], radius: float
) -> Candidate | None:
    """Fit a blurred disc about a place; None if nothing of the radius is there."""
    reach = _RING[1] * radius
    first = [max(0, math.floor((c - reach) / d)) for c, d in zip(start, spacing, strict=True)]
    last = [
        min(n - 1, math.ceil((c + reach) / d))
        for c, d, n in zip(start, spacing, image.shape, strict=True)
    ]
    crop = image[first[0] : last[0] + 1, first[1] : last[1] + 1]
    y = (np.arange(first[0], last[0] + 1) * spacing[0])[:, None]
    x = (np.arange(first[1], last[1] + 1) * spacing[1])[None, :]
    inside = np.hypot(y - start[0], x - start[1]) <= reach
    if np.count_nonzero(inside) < 20:
        return None
    values = crop[inside]

    def model(p: Floats) -> Floats:
        r = np.hypot(y - p[2], x - p[3])[inside]
        disc: Floats = p[0] + p[1] * 0.5 * special.erfc((r - p[4]) / (math.sqrt(2) * p[5]))
        return disc

    level = float(np.median(values))
    middle = float(image[round(start[0] / spacing[0]), round(start[1] / spacing[1])])
    pixel = max(spacing)
    low = [-np.inf, -np.inf, start[0] - radius, start[1] - radius, 0.5 * radius, 0.1 * pixel]
    high = [np.inf, np.inf, start[0] + radius, start[1] + radius, 1.5 * radius, radius]
    guess = [level, middle - level, start[0], start[1], radius, min(pixel, 0.5 * radius)]
    fit = optimize.least_squares(
        lambda p: model(p) - values, guess, bounds=(low, high), x_scale="jac", max_nfev=40
    )
    if abs(fit.x[4] / radius - 1) > _RADIUS_SHARE or not np.linalg.cond(fit.jac) < 1e8:
        return None
    residual = np.zeros(crop.shape)
    residual[inside] = fit.fun
    spread = _correlated_spread(residual, inside.astype(float), spacing)
    u = spread * np.sqrt(np.diag(np.linalg.inv(fit.jac.T @ fit.jac)))
    if abs(fit.x[1]) < _SURE * u[1]:
        return None
    return Candidate(
        (float(fit.x[2]), float(fit.x[3])),
        float(math.hypot(u[2], u[3]) / math.sqrt(2)),
        float(fit.x[4]),
        float(fit.x[1]),
    )


def _correlated_spread(residual: Floats, inside: Floats, spacing: tuple[float, float]) -> float:
    """Return the SD of the residuals, enlarged for their correlation.

    Neighbours along an edge share their noise as those of a mean do, Σρ, or as those of a variance,
    Σρ², whichever is more: the first is small for the noise of filtered backprojection.
    """
    doubt = doubt_of_mean(residual, inside, spacing)
    count = float(inside.sum())
    variance = float(np.sum(residual**2)) / (count - 6)
    shared = max(
        1.0,
        count / doubt.power_samples,
        count * doubt.variance_of_mean / variance if variance > 0 else 1.0,
    )
    return math.sqrt(variance * shared)
