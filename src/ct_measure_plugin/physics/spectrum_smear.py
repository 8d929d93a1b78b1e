"""How far window and ring width smear a radial spectrum, and the curve without it.

A window of finite length replaces the spectrum by its local average over about a bin: of a spectrum
that starts like a ramp it makes 4 % too much in the second bin, and as much of one that falls
steeply. Taking the mean over a ring adds to it. Both follow from the measured curve itself, through
a smooth local model of it that is smeared in the same way, and are divided out.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from scipy import fft

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.radial import Groups

    Floats = NDArray[np.float64]
    Flags = NDArray[np.bool_]

__all__ = ["Bins", "smear", "window_response"]

#: Rings to either side from which the local shape is taken.
REACH = 3

#: Largest relative smear that is believed: beyond it the curve's shape is the window's.
LARGEST = 0.5

#: Bins of a ring that are looked at, of a quarter of the plane.
MOST_BINS = 32

#: Steps of a frequency bin in which the window's response is sampled, and how far, in bins.
FINENESS, EXTENT = 2, 3

#: How often the model is fitted anew to the curve without its smear.
ROUNDS = 3


def window_response(window: Floats) -> tuple[Floats, Floats]:
    """Return offsets in bins and the share of the power that a window takes from each.

    A window that jumps at its ends leaks far, and what it leaks is not local: its response is cut
    off at three bins, and what lies beyond is left alone.

    >>> offset, share = window_response(np.sin(np.pi * (np.arange(64) + 0.5) / 64) ** 2)
    >>> round(float(share @ offset**2), 3)  # Hann's second moment: 1/3 in all
    0.332
    >>> window_response(np.ones(64))[0].tolist()  # a flat one mixes nothing that is stationary
    [0.0]
    """
    if np.ptp(window) == 0:
        return np.zeros(1), np.ones(1)
    n = FINENESS * len(window)
    power = np.abs(fft.fft(window, n)) ** 2
    offset = np.arange(-FINENESS * EXTENT, FINENESS * EXTENT + 1)
    share = power[offset % n]
    kept = share > 1e-5 * share.max()
    return offset[kept] / FINENESS, np.asarray(share[kept] / share[kept].sum())


@dataclass(frozen=True, slots=True, eq=False)
class Bins:
    """The bins of every ring, in a quarter of the plane.

    Attributes
    ----------
    fy, fx : ndarray, shape (m,)
        Their frequencies in mm⁻¹, not negative.
    ring : ndarray of int, shape (m,)
        The ring that each belongs to.
    share : ndarray, shape (m,)
        How much each counts in its ring; the sum is 1 in every ring.
    looked_at : ndarray of bool, shape (m,)
        Those at which the window's smear is worked out; it changes little within a ring.
    nyquist : (float, float)
        Where the spectrum along each axis is mirrored, as that of any sampled image.
    bin : (float, float)
        Width of a bin of the patch itself, without padding.
    """

    fy: Floats
    fx: Floats
    ring: NDArray[np.intp]
    share: Floats
    looked_at: Flags
    nyquist: tuple[float, float]
    bin: tuple[float, float]

    @classmethod
    def of(
        cls,
        groups: Groups,
        shape: tuple[int, int],
        transform: tuple[int, int],
        spacing_mm: tuple[float, float],
    ) -> Bins:
        """Gather them from rings of a transform of patches of a shape."""
        rows, columns = (n // 2 + 1 for n in transform)
        label = groups.labels[:rows, :columns]
        y, x = np.nonzero(label >= 0)
        ring = label[y, x]
        order = np.argsort(ring, kind="stable")
        y, x, ring = y[order], x[order], ring[order]
        count = np.bincount(ring, minlength=len(groups.bins))
        rank = np.arange(len(ring)) - (np.cumsum(count) - count)[ring]
        mirrored = [
            np.where((k == 0) | (2 * k == n), 1.0, 2.0)
            for k, n in zip((y, x), transform, strict=True)
        ]
        weight = mirrored[0] * mirrored[1]
        total = np.bincount(ring, weight, minlength=len(groups.bins))
        dy, dx = spacing_mm
        return cls(
            y / (transform[0] * dy),
            x / (transform[1] * dx),
            ring,
            weight / total[ring],
            rank % np.maximum(-(-count // MOST_BINS), 1)[ring] == 0,
            (0.5 / dy, 0.5 / dx),
            (1.0 / (shape[0] * dy), 1.0 / (shape[1] * dx)),
        )


def smear(
    x: Floats, y: Floats, usable: Flags, windows: tuple[Floats, Floats], bins: Bins
) -> Floats:
    """Return the relative smear of each sample of a radial curve; 0 where it is not usable.

    Parameters
    ----------
    x, y : ndarray, shape (g,)
        Frequency and measured NPS.
    usable : ndarray of bool, shape (g,)
        Where detrending has left the noise alone.
    windows : (ndarray, ndarray)
        The window along y and along x.
    bins : Bins
        Of the rings.

    Notes
    -----
    Around each ring ln S is fitted by a + b ln f + c f², a family that holds white noise, ramps,
    Gaussians and their products, over seven rings. The fit is taken at every bin of the ring and
    at the offsets that the window mixes into it, mirrored at the Nyquist frequencies; the mean of
    these over the fit at the ring's own frequency is one plus the smear. The curve without it is
    fitted again, three times in all.

    Examples
    --------
    >>> from ct_measure_plugin.physics.radial import rings
    >>> shape, hann = (64, 64), np.sin(np.pi * (np.arange(64) + 0.5) / 64) ** 2
    >>> groups = rings(shape, (0.5, 0.5))
    >>> f = groups.frequency
    >>> found = smear(f, f, f > 0.07, (hann, hann), Bins.of(groups, shape, shape, (0.5, 0.5)))
    >>> expected = (1 / 3 / 32**2) / 2 / f**2  # ½ σ² ∇²S / S of a ramp, to second order
    >>> bool(np.allclose(found[3:20], expected[3:20], atol=2e-3))
    True
    """
    index = np.flatnonzero(usable & (y > 0))
    found = np.zeros(len(x))
    if len(index) < 2 * REACH:
        return found
    place = np.arange(len(index))
    start = np.clip(place - REACH, 0, max(len(index) - 2 * REACH - 1, 0))
    near = start[:, None] + np.arange(min(2 * REACH + 1, len(index)))
    f = x[index][near] / x[index][:, None]
    design = np.stack([np.ones(f.shape), np.log(f), f**2], axis=2)
    solve = np.linalg.pinv(design)
    forward = _Forward(_only(bins, index, len(x)), x[index], windows)
    for _ in range(ROUNDS):
        level = np.log(y[index] / (1.0 + found[index]))
        fits = np.einsum("kij,kj->ki", solve, level[near])
        found[index] = np.clip(forward.smeared(fits) - 1.0, -LARGEST, LARGEST)
    return found


def _only(bins: Bins, index: NDArray[np.intp], rings: int) -> Bins:
    """Return the bins of some rings, numbered from 0."""
    number = np.full(rings, -1)
    number[index] = np.arange(len(index))
    ring = number[bins.ring]
    kept = ring >= 0
    return _chosen(replace(bins, ring=ring), kept)


def _chosen(bins: Bins, kept: Flags) -> Bins:
    return replace(
        bins,
        fy=bins.fy[kept],
        fx=bins.fx[kept],
        ring=bins.ring[kept],
        share=bins.share[kept],
        looked_at=bins.looked_at[kept],
    )


class _Forward:
    """What windows and rings make of a fit, with all that does not change from fit to fit."""

    def __init__(self, bins: Bins, at: Floats, windows: tuple[Floats, Floats]) -> None:
        some = _chosen(bins, bins.looked_at)
        (oy, ky), (ox, kx) = map(window_response, windows)
        along = _folded(some.fy + oy[:, None] * bins.bin[0], bins.nyquist[0]) ** 2
        across = _folded(some.fx + ox[:, None] * bins.bin[1], bins.nyquist[1]) ** 2
        least = (0.25 * max(bins.bin)) ** 2
        self.response = (ky[:, None] * kx).ravel()
        self.through = _Places(
            np.maximum(along[:, None] + across, least).reshape(len(self.response), -1), some, at
        )
        self.without = _Places((some.fy**2 + some.fx**2)[None], some, at)
        self.plain = _Places((bins.fy**2 + bins.fx**2)[None], bins, at)

    def smeared(self, fits: Floats) -> Floats:
        """Return each ring's mean of its fit, through the windows, over the fit at the ring."""
        through = self.through.mean(fits, self.response) / self.without.mean(fits)
        found: Floats = self.plain.mean(fits) * through / np.exp(fits[:, 0] + fits[:, 2])
        return found


class _Places:
    """Squared frequencies, shape (offsets, bins), at which each bin's fit is taken."""

    def __init__(self, square: Floats, bins: Bins, at: Floats) -> None:
        self.u = square / at[bins.ring] ** 2
        self.log = 0.5 * np.log(self.u)
        self.ring, self.share = bins.ring, bins.share
        self.total = np.bincount(bins.ring, bins.share)

    def mean(self, fits: Floats, response: Floats | None = None) -> Floats:
        """Return the mean over each ring of the fits, through a response if there is one."""
        a, b, c = fits[self.ring].T
        value = np.exp(np.minimum(a + b * self.log + c * self.u, 700.0))
        seen = value[0] if response is None else response @ value
        return np.asarray(np.bincount(self.ring, seen * self.share) / self.total)


def _folded(f: Floats, nyquist: float) -> Floats:
    """Return frequencies mirrored at the Nyquist frequency."""
    size = np.abs(f)
    return np.where(size > nyquist, 2 * nyquist - size, size)
