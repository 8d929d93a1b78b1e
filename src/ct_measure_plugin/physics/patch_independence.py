"""How many independent looks at the noise a set of patches gives.

Patches that overlap share pixels, neighbouring slices share noise, and a window mixes neighbouring
bins. For Gaussian noise whose spectrum is smooth over a bin, the averaged power of two bins q apart
covaries by S² κ(q), with

    κ(q) = n⁻² Σ_ij ρ_ij² |Σ_x w(x) w(x + Δ_ij) exp(−2πi q x / N)|² / (Σ w²)²,

Δ_ij the shift between patches i and j and ρ_ij the correlation between their slices. For patches
apart and a flat window this is 1/n at q = 0 and 0 elsewhere; the sum over shifts is that of
P. D. Welch, IEEE Trans. Audio Electroacoust. 15 (1967) 70, in two dimensions.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import fft
from scipy.spatial import cKDTree

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]
    Whole = NDArray[np.intp]

__all__ = [
    "Independence",
    "independence_by_order",
    "independence_by_place",
    "neighbour_pairs",
    "slice_correlation",
]

#: A correlation between patches counts from this many of its own standard deviations.
STANDS_OUT = 4.0

#: Fewer patches than this do not tell their own correlation by their order.
ENOUGH_FOR_ORDER = 8


@dataclass(frozen=True, slots=True, eq=False)
class Independence:
    """What the shared pixels and slices leave of n patches.

    Attributes
    ----------
    patches : int
        n.
    kernel : ndarray, shape (ny, nx) of the transform
        κ within the plane.
    patch_kernel : ndarray, same shape
        The same for a single patch.
    independent : float
        Number of patches that lie apart and would give the same uncertainty of a mean over many
        bins.
    """

    patches: int
    kernel: Floats
    patch_kernel: Floats
    independent: float

    def shared(self) -> bool:
        """Tell whether the patches are worth fewer than their number."""
        return self.independent < 0.98 * self.patches


def _shift_power(window: Floats, shift: int, length: int) -> Floats:
    """Return |Σ w(x) w(x + shift) exp(−2πi q x / length)|² / (Σ w²)² for every q."""
    n = len(window)
    common = window[: n - shift] * window[shift:]
    found: Floats = np.abs(fft.fft(common, n=length)) ** 2 / np.sum(window**2) ** 2
    return found


def _alone(windows: tuple[Floats, ...], transform: tuple[int, ...]) -> Floats:
    """Return the kernel of a single patch in the plane."""
    y, x = (_shift_power(w, 0, n) for w, n in zip(windows[-2:], transform[-2:], strict=True))
    return y[:, None] * x[None, :]


def independence_by_place(
    corners: Whole,
    windows: tuple[Floats, ...],
    transform: tuple[int, ...],
    slice_power: Floats,
) -> Independence:
    """Return the independence of patches whose places are known.

    Parameters
    ----------
    corners : ndarray of int, shape (n, 3)
        Slice, row and column of each patch's first pixel.
    windows : tuple of ndarray
        The window along each axis of a patch, two or three axes.
    transform : tuple of int
        Lengths of the transform.
    slice_power : ndarray, shape (lags,)
        ρ² between slices 0, 1, 2, … apart; its first entry is 1.
    """
    n = len(corners)
    alone = _alone(windows, transform)
    deep = len(windows) == 3
    reach_z = len(windows[0]) - 1 if deep else len(slice_power) - 1
    shifts, counts = _pair_shifts(corners, windows, reach_z)
    total = n * alone
    if len(shifts):
        along = [
            np.stack([_shift_power(w, d, m) for d in range(len(w))])
            for w, m in zip(windows[-2:], transform[-2:], strict=True)
        ]
        depth = (
            np.array([_shift_power(windows[0], d, 1)[0] for d in range(len(windows[0]))])
            if deep
            else slice_power
        )
        weight = 2.0 * counts * depth[shifts[:, 0]]
        total = total + (along[0][shifts[:, 1]] * weight[:, None]).T @ along[1][shifts[:, 2]]
    independent = n * n * float(alone.sum()) / float(total.sum())
    return Independence(n, total / n**2, alone, independent)


def _pair_shifts(corners: Whole, windows: tuple[Floats, ...], reach_z: int) -> tuple[Whole, Floats]:
    """Return the distinct absolute shifts of patches that share noise, and how many pairs each."""
    scale = np.array([reach_z + 0.5, len(windows[-2]) - 0.5, len(windows[-1]) - 0.5])
    tree = cKDTree(corners / scale)
    pairs = tree.query_pairs(1.0, p=np.inf, output_type="ndarray")
    if not len(pairs):
        return np.zeros((0, 3), dtype=np.intp), np.zeros(0)
    shifts = np.abs(corners[pairs[:, 0]] - corners[pairs[:, 1]])
    kinds, counts = np.unique(shifts, axis=0, return_counts=True)
    return kinds, counts.astype(float)


def independence_by_order(
    ring_power: Floats, windows: tuple[Floats, ...], transform: tuple[int, ...]
) -> Independence:
    """Return the independence of patches of unknown place, from their spectra in the order given.

    Parameters
    ----------
    ring_power : ndarray, shape (n, rings)
        Each patch's power averaged over rings.

    Notes
    -----
    Patches that share noise also share the chance ups and downs of their spectra: the correlation
    of the relative ring power of patches k places apart in the order is averaged over rings, and
    summed over those k where it exceeds four times its own standard deviation. Rows of a grid,
    and slices one after the other, are found in this way; patches that overlap in no regular
    order are not.
    """
    n = len(ring_power)
    alone = _alone(windows, transform)
    if n < ENOUGH_FOR_ORDER:
        return Independence(n, alone / n, alone, float(n))
    # each patch over its own level first: a change of noise from patch to patch is no sharing
    level = np.mean(ring_power / ring_power.mean(axis=0), axis=1, keepdims=True)
    relative = ring_power / level
    relative = relative / relative.mean(axis=0) - 1.0
    spread = relative.std(axis=0)
    relative = relative[:, spread > 0] / spread[spread > 0]
    rings = relative.shape[1]
    mixed = relative.T @ relative / n
    looks = rings**2 / float(np.sum(mixed**2))
    size = fft.next_fast_len(2 * n, real=True)
    power = np.abs(fft.rfft(relative, n=size, axis=0)) ** 2
    lag = fft.irfft(power.sum(axis=1), n=size)[1 : n // 2 + 1]
    pairs = n - np.arange(1, n // 2 + 1)
    # the mean taken out lowers every correlation by 1/n
    correlation = lag / (pairs * rings) + 1.0 / n
    clear = correlation > STANDS_OUT / np.sqrt(pairs * looks)
    inflation = 1.0 + 2.0 * float(np.sum((pairs / n * correlation)[clear]))
    return Independence(n, alone * inflation / n, alone, n / inflation)


def slice_correlation(residuals: Floats, corners: Whole, samples: float) -> Floats:
    """Return the correlation of patches at one place in slices 0, 1, 2, … apart, shape (lags,).

    Parameters
    ----------
    residuals : ndarray, shape (n, pixels)
        The detrended patches.
    corners : ndarray of int, shape (n, 3)
        Their slices, rows and columns.
    samples : float
        Independent samples in one patch; they set what a correlation must exceed to count.
    """
    found = [1.0]
    power = np.einsum("ij,ij->i", residuals, residuals)
    furthest = int(np.ptp(corners[:, 0]))
    for lag in range(1, furthest + 1):
        pairs = neighbour_pairs(corners, lag)
        if not len(pairs):
            continue  # slices may have been taken at a step
        a, b = pairs[:, 0], pairs[:, 1]
        joint = float(np.einsum("ij,ij->", residuals[a], residuals[b]))
        rho = joint / float(np.sqrt(power[a].sum() * power[b].sum()))
        if abs(rho) < STANDS_OUT / np.sqrt(len(pairs) * samples):
            break
        found += [0.0] * (lag - len(found)) + [rho]
    return np.asarray(found)


def neighbour_pairs(corners: Whole, lag: int) -> Whole:
    """Return the pairs of patches at one place whose slices are `lag` apart, shape (pairs, 2)."""
    place = {tuple(corner): i for i, corner in enumerate(corners.tolist())}
    pairs = [
        (i, place[(s + lag, y, x)]) for (s, y, x), i in place.items() if (s + lag, y, x) in place
    ]
    return np.asarray(pairs, dtype=np.intp).reshape(-1, 2)
