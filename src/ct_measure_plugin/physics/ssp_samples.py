"""Samples of the slice sensitivity profile from what crosses the slices."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import linalg, ndimage, special

from ct_measure_plugin.physics.edge_line import pixel_grid
from ct_measure_plugin.physics.mtf_curve import width_at
from ct_measure_plugin.physics.regions import direction
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.ssp_noise import (
    clear_mean,
    climb_covariance,
    freedom,
    mean_spectrum,
    positive,
    slice_correlation,
)
from ct_measure_plugin.physics.wire_trace import trace_wire

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["Ramp", "SspSamples", "bead_samples", "find_ramp", "ramp_samples"]

#: A bead's signal is gathered within this many sigma of its spot; the background lies beyond the
#: second and within the third.
WITHIN, BEYOND, UPTO = 3.0, 4.0, 8.0

#: Share of a ramp's width that is averaged: its ends, blurred by the slice's own resolution, stay
#: out.
KEPT_WIDTH = 0.6

#: Slices whose scatter along the climb alone tells the uncertainty of the angle.
MANY_SLICES = 8

#: SD in pixels of the Gaussian that calms the slices in which a ramp is looked for.
SMOOTHED = 1.0

#: Widths of a wire that are averaged: all of it.
WIRE_WIDTH = 3.0

#: Steps a width into which a ramp's pixels are pooled, at most; widths from its middle beyond which
#: pixels show background, and up to which they are read.
FINEST, CLEAR, SEEN = 22.0, 1.3, 2.2


@dataclass(frozen=True, slots=True, eq=False)
class SspSamples:
    """A sampled slice profile.

    Attributes
    ----------
    z, value : ndarray, shape (n,)
        Increasing distances along the slice normal, mm, and the profile there.
    step : float
        Distance between independent samples, mm: the slice increment, or the pixels' projection.
    covariance : ndarray, shape (n, n)
        Of the noise of the samples.
    freedom : float
        Independent pixels that told the noise.
    smeared : float
        Variance over which each sample is an average along z, mm².
    scale_doubt : float
        Relative standard uncertainty of the common scale of all samples.
    shared : float
        Factor on the variance of a mean over slices, whose noise is correlated.
    """

    z: Floats
    value: Floats
    step: float
    covariance: Floats
    freedom: float
    smeared: float = 0.0
    scale_doubt: float = 0.0
    shared: float = 1.0

    @property
    def noise(self) -> float:
        """SD of a sample."""
        return math.sqrt(float(np.median(np.diag(self.covariance))))


def bead_samples(
    stack: Floats, spacing_mm: tuple[float, float], gap: float
) -> tuple[SspSamples, tuple[float, float]] | NotMeasured:
    """Return a bead's signal slice by slice, and its place (y, x) in mm from pixel (0, 0).

    The spot's shape comes from the mean of all slices; in each slice its height over a ring about
    it is fitted. Fitting a shape is summing with weights: where the bead lies between the pixels
    does not matter.
    """
    mean = stack.mean(axis=0)
    found = trace_wire(mean[None], spacing_mm)
    if isinstance(found, NotMeasured):
        return NotMeasured("no bead was found in the box", "draw it around one bead")
    y, x = pixel_grid((mean.shape[0], mean.shape[1]), spacing_mm)
    cy, cx = (float(v) for v in found.centers[0])
    radius = np.hypot(y - cy, x - cx) / found.sigma
    if UPTO * found.sigma > min(float(y[-1, 0]) - abs(cy), float(x[0, -1]) - abs(cx)):
        return NotMeasured(
            f"less than {UPTO:g} sigma of the bead's spot lie clear of the border of the box",
            "centre the box on the bead, or draw it larger",
        )
    spot = np.exp(-0.5 * radius**2) * (radius <= WITHIN)
    ring = (radius >= BEYOND) & (radius <= UPTO)
    level = np.array([clear_mean(plane[ring]) for plane in stack])
    flat = stack - level[:, None, None]
    weights = spot / float(np.sum(spot**2))
    heights = np.tensordot(flat, weights, 2)
    rings = np.broadcast_to(ring, stack.shape)
    spectrum = mean_spectrum(flat, rings, spacing_mm)
    drawn = weights - float(weights.sum()) * ring / int(ring.sum())  # the ring's mean with it
    noise = math.sqrt(float(spectrum.variance_of_sums(drawn[None])[0]))
    z = np.arange(len(stack), dtype=np.float64) * gap
    place = cy - float(y[0, 0]), cx - float(x[0, 0])
    # the spot's width was fitted with its height, which makes that twice as uncertain
    mean_height = abs(float(heights.mean()))
    doubt = 2 * noise / math.sqrt(len(stack)) / mean_height if mean_height > 0 else 0.0
    told = freedom(spectrum, rings)
    covariance = noise**2 * positive(linalg.toeplitz(slice_correlation(flat, rings)))
    return SspSamples(z, heights, gap, covariance, told, scale_doubt=doubt), place


@dataclass(frozen=True, slots=True, eq=False)
class Ramp:
    """A plate or wire that climbs through the slices.

    Attributes
    ----------
    climb : (float, float)
        Unit vector (y, x) in the slice towards which it climbs.
    tangent, tangent_doubt : float
        Height gained per mm in the slice, and its standard uncertainty; the doubt is 0 if given.
    centers : ndarray, shape (k, 2)
        Where it crosses the slices that show all of it, (y, x) from the middle of the box, mm.
    slices : ndarray of int, shape (k,)
        Those slices.
    """

    climb: tuple[float, float]
    tangent: float
    tangent_doubt: float
    centers: Floats
    slices: NDArray[np.intp]


def level_stack(stack: Floats) -> Floats:
    """Return slices less a plane fitted to the pixels that do not depart from it."""
    ny, nx = stack.shape[1:]
    y, x = np.mgrid[-1 : 1 : ny * 1j, -1 : 1 : nx * 1j]
    columns = np.stack([np.ones(ny * nx), y.ravel(), x.ravel()], axis=1)
    flat = []
    for plane in stack:
        v = plane.ravel()
        kept = np.abs(v - np.median(v)) <= 4 * 1.4826 * np.median(np.abs(v - np.median(v)))
        mix = np.zeros(3)
        for _ in range(3):
            if int(kept.sum()) < 10:
                break
            mix = np.linalg.lstsq(columns[kept], v[kept], rcond=None)[0]
            left = v - columns @ mix
            spread = 1.4826 * float(np.median(np.abs(left[kept])))
            kept = np.abs(left) <= 3.5 * spread if spread > 0 else kept
        flat.append((v - columns @ mix).reshape(ny, nx))
    return np.array(flat)


def find_ramp(
    level: Floats,
    spacing_mm: tuple[float, float],
    gap: float,
    angle_deg: float | None,
    climb_deg: float | None,
) -> Ramp | NotMeasured:
    """Return how a ramp climbs, from where its middle lies in each slice.

    Parameters
    ----------
    level : ndarray, shape (nz, ny, nx)
        Slices with the background taken out.
    spacing_mm : (float, float)
        dy, dx.
    gap : float
        Distance between slices, mm.
    angle_deg : float, optional
        Angle between ramp and slice; found from the slices if not given.
    climb_deg : float, optional
        Direction in the slice along which it climbs, for fewer than three slices; by default the
        one along which it is longest, which is right for a wire.
    """
    y, x = pixel_grid((level.shape[1], level.shape[2]), spacing_mm)
    # pixels that noise alone lifts over the floor would draw the middle to that of the box
    smooth = ndimage.gaussian_filter(level, (0.0, SMOOTHED, SMOOTHED), mode="nearest")
    signal = smooth * np.sign(np.sum(smooth[np.abs(smooth) > 0.5 * np.abs(smooth).max()]))
    floor = 0.25 * float(np.quantile(signal, 0.999))
    inside = np.maximum(signal - floor, 0.0)
    total = inside.sum(axis=(1, 2))
    border = np.concatenate(
        [inside[:, 0], inside[:, -1], inside[:, :, 0], inside[:, :, -1]], axis=1
    ).sum(axis=1)
    whole = np.flatnonzero(
        (total > 0.8 * np.median(total[total > 0.5 * total.max()])) & (border < 0.02 * total)
    )
    if len(whole) < (1 if angle_deg is not None else 3):
        return NotMeasured(
            f"only {len(whole)} slices show the whole of a ramp or wire within the box"
            + ("" if angle_deg is not None else "; 3 are needed to find its angle"),
            "draw the box larger, take more slices, or enter the angle",
        )
    weights = inside[whole] / total[whole][:, None, None]
    centers = np.stack([np.sum(weights * y, axis=(1, 2)), np.sum(weights * x, axis=(1, 2))], axis=1)
    if len(whole) < 3:
        if climb_deg is None:
            climb = _long_axis(weights.mean(axis=0), y, x)
        else:
            climb = direction(climb_deg)
        return Ramp(climb, math.tan(math.radians(angle_deg or 0.0)), 0.0, centers, whole)
    z = (whole - whole.mean()) * gap
    shift = z @ centers / float(z @ z)  # mm in the slice per mm of height
    left = centers - centers.mean(axis=0) - z[:, None] * shift
    length = float(np.hypot(*shift))
    n = len(whole)
    both = float(np.sum(left**2)) / (2 * n - 4)
    # a wire's image is long along the climb, a ramp's across it
    own = float(np.sum((left @ shift) ** 2)) / max(length, 1e-9) ** 2 / (n - 2)
    scatter = own if n >= MANY_SLICES else max(own, both)
    student = float(special.stdtrit(n - 2 if n >= MANY_SLICES else 2 * n - 4, 0.975)) / 1.96
    doubt = student * math.sqrt(scatter / float(z @ z))
    if length < 0.2:
        return NotMeasured(
            f"it moves only {length * gap:.2g} mm from slice to slice: too steep for a ramp",
            "measure it as a wire within the slice, or choose a bead",
        )
    climb = float(shift[0]) / length, float(shift[1]) / length
    if angle_deg is not None:
        return Ramp(climb, math.tan(math.radians(angle_deg)), 0.0, centers, whole)
    return Ramp(climb, 1 / length, doubt / length**2, centers, whole)


def _long_axis(weights: Floats, y: Floats, x: Floats) -> tuple[float, float]:
    """Return the direction along which weights spread most, pointing to +x."""
    my, mx = float(np.sum(weights * y)), float(np.sum(weights * x))
    v, u = y - my, x - mx
    yy, xx, xy = (float(np.sum(weights * w)) for w in (v * v, u * u, v * u))
    turn = 0.5 * math.atan2(2 * xy, xx - yy)
    return math.sin(turn), math.cos(turn)


def ramp_samples(
    level: Floats, ramp: Ramp, spacing_mm: tuple[float, float], gap: float, *, thin: bool
) -> SspSamples:
    """Return the profile along a ramp or, if thin, a wire, all slices pooled.

    Every pixel lies at some height of the ramp above or below its slice; pixels are averaged in
    steps of that height. Of a wire, whose height varies across, a Gaussian's height is fitted.
    """
    y, x = pixel_grid((level.shape[1], level.shape[2]), spacing_mm)
    cy, cx = ramp.climb
    middle = ramp.centers.mean(axis=0)
    reference = float(ramp.slices.mean())
    along = (y - middle[0]) * cy + (x - middle[1]) * cx
    across = (x - middle[1]) * cy - (y - middle[0]) * cx
    pixel = min(spacing_mm)
    half, width = _across(level[ramp.slices], across, pixel)
    used = np.abs(across - half) <= (WIRE_WIDTH if thin else KEPT_WIDTH) * width / 2
    shape, lever = np.ones_like(across), 0.0
    if thin:
        shape, lever = _wire_shape(level[ramp.slices].mean(axis=0), across, used)
    z = np.stack([along * ramp.tangent - (k - reference) * gap for k in range(len(level))])
    pooled = z[:, used].ravel(), level[:, used].ravel(), np.tile(shape[used], len(level))
    step = pixel * ramp.tangent / 2
    place, mean, *_ = _pooled(*pooled, step)
    signal = np.abs(mean - np.median(mean))
    wide, top = width_at(place, signal, 0.5), float(place[np.argmax(signal)])
    place, mean, count, smeared = _pooled(*pooled, max(step, wide / FINEST))
    near = np.abs(place - top) <= SEEN * wide
    away = np.abs(z - top) > CLEAR * wide
    spectrum, alike = mean_spectrum(level, away, spacing_mm), slice_correlation(level, away)
    covariance = climb_covariance(
        place[near],
        count[near],
        spectrum,
        alike,
        length=float(used.sum()) * spacing_mm[0] * spacing_mm[1] / float(np.ptp(along[used])),
        gap=gap,
        tangent=ramp.tangent,
        direction=math.atan2(cy, cx),
    )
    shared = 2 * float(alike.sum()) - 1
    noise = float(level[away].std()) if away.any() else 0.0
    return SspSamples(
        z=place[near],
        value=mean[near],
        step=pixel * ramp.tangent,
        covariance=covariance,
        freedom=freedom(spectrum, away),
        smeared=smeared,
        scale_doubt=lever * noise * math.sqrt(shared / len(ramp.slices)),
        shared=shared,
    )


def _wire_shape(mean: Floats, across: Floats, used: NDArray[np.bool_]) -> tuple[Floats, float]:
    """Return a wire's Gaussian across its climb, and what a unit of noise does to its height.

    Height and width are fitted to the same wire: a width too large by a share makes the height too
    small by half of it.
    """
    value, x = mean[used], across[used]
    total = float(value.sum())
    half = float(value @ x) / total
    variance = float(value @ (x - half) ** 2) / total
    shape = np.exp(-((across - half) ** 2) / (2 * variance))
    pulls = ((x - half) ** 2 - variance) / total
    return shape, math.sqrt(float(pulls @ pulls)) / (4 * abs(variance))


def _pooled(z: Floats, v: Floats, g: Floats, step: float) -> tuple[Floats, Floats, Floats, float]:
    """Return places, means and numbers of values in steps of z, and the variance of z in a step."""
    index = np.rint(z / step).astype(np.intp)
    index -= int(index.min())
    count = np.bincount(index, g * g)
    filled = count >= 0.15 * np.median(count[count > 0])
    place = np.bincount(index, z * g * g)[filled] / count[filled]
    square = np.bincount(index, z * z * g * g)[filled] / count[filled]
    mean = np.bincount(index, v * g)[filled] / count[filled]
    numbers = np.asarray(count[filled], dtype=np.float64)
    return place, mean, numbers, float(np.median(square - place**2))


def _across(level: Floats, across: Floats, pixel: float) -> tuple[float, float]:
    """Return middle and full width at half maximum of a ramp across its climb, mm."""
    index = np.rint(across / pixel).astype(np.intp)
    low = int(index.min())
    mean = level.mean(axis=0)
    sums = np.bincount((index - low).ravel(), mean.ravel())
    sums = sums * np.sign(sums[np.argmax(np.abs(sums))])
    high = np.flatnonzero(sums > 0.5 * sums.max())
    middle = (float(high[0] + high[-1]) / 2 + low) * pixel
    return middle, float(high[-1] - high[0] + 1) * pixel
