"""Bins of a discrete spectrum gathered into rings and lines of physical frequency."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import fft

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["Groups", "frequencies", "line", "rings"]


@dataclass(frozen=True, slots=True, eq=False)
class Groups:
    """Bins of a two-dimensional spectrum gathered by frequency.

    Attributes
    ----------
    labels : ndarray of int, shape (ny, nx), in the order of the transform
        Group of each bin; -1 for none.
    frequency : ndarray, shape (g,)
        Mean frequency of each group's bins in mm⁻¹.
    bins : ndarray, shape (g,)
        Number of bins.
    """

    labels: NDArray[np.intp]
    frequency: Floats
    bins: Floats

    def mean(self, spectrum: Floats) -> Floats:
        """Return the mean over each group's bins; leading axes are kept."""
        flat = spectrum.reshape(*spectrum.shape[:-2], -1)
        used = self.labels.ravel() >= 0
        membership = np.zeros((int(used.sum()), len(self.bins)))
        membership[np.arange(len(membership)), self.labels.ravel()[used]] = 1.0
        found: Floats = flat[..., used] @ (membership / self.bins)
        return found

    def scatter(self, kernel: Floats) -> Floats:
        """Return the relative covariance of the groups' means, shape (g, g).

        Parameters
        ----------
        kernel : ndarray, shape (ny, nx)
            Correlation of two bins' averaged power by their distance, in the order of the
            transform; at 0 the inverse number of independent patches.

        Notes
        -----
        For Gaussian noise two bins k and l covary by S_k S_l (κ(k − l) + κ(k + l)); groups hold
        each bin together with its mirror image, so both terms sum to the same.
        """
        members = self.labels[None] == np.arange(len(self.bins))[:, None, None]
        share = members / self.bins[:, None, None]
        spread = fft.irfft2(fft.rfft2(share) * fft.rfft2(kernel), s=kernel.shape)
        g = len(self.bins)
        found: Floats = 2.0 * share.reshape(g, -1) @ spread.reshape(g, -1).T
        return found


def frequencies(shape: tuple[int, ...], spacing_mm: tuple[float, ...]) -> tuple[Floats, ...]:
    """Return the frequency of each bin along each axis, in the order of the transform."""
    return tuple(np.asarray(fft.fftfreq(n, d)) for n, d in zip(shape, spacing_mm, strict=True))


def rings(
    shape: tuple[int, int], spacing_mm: tuple[float, float], width_per_mm: float | None = None
) -> Groups:
    """Gather bins into rings around frequency 0, which is left out.

    Parameters
    ----------
    shape, spacing_mm
        Of the transform and of the pixels.
    width_per_mm : float, optional
        Width of a ring; by default the coarser of the two axes' frequency steps. Ring j holds
        frequencies within half a width of j times the width.

    Notes
    -----
    Frequencies are physical, so that anisotropic pixels give ellipses of bins, and rings reach up
    to the smaller of the two Nyquist frequencies.

    Examples
    --------
    >>> found = rings((64, 64), (0.5, 0.5))
    >>> len(found.bins), [int(n) for n in found.bins[:3]]
    (32, [8, 12, 16])
    """
    fy, fx = frequencies(shape, spacing_mm)
    radius = np.hypot(fy[:, None], fx[None, :])
    step = max(1.0 / (n * d) for n, d in zip(shape, spacing_mm, strict=True))
    width = step if width_per_mm is None else width_per_mm
    limit = min(0.5 / d for d in spacing_mm)
    labels = np.rint(radius / width).astype(np.intp) - 1
    labels[radius > limit * (1 + 1e-9)] = -1
    labels[0, 0] = -1
    return _gathered(labels, radius)


def line(
    shape: tuple[int, int], spacing_mm: tuple[float, float], axis: int, reach: int = 1
) -> Groups:
    """Gather bins along one frequency axis, over `reach` bins to either side of it.

    Parameters
    ----------
    axis : {0, 1}
        0: along fy; 1: along fx. The two signs are gathered together; frequency 0 is left out.
    """
    along = frequencies(shape, spacing_mm)[axis]
    index = np.abs(np.rint(along * shape[axis] * spacing_mm[axis])).astype(np.intp) - 1
    across = np.abs(fft.fftfreq(shape[1 - axis], 1.0 / shape[1 - axis])) <= reach + 0.5
    frequency = np.abs(along)
    if axis == 0:
        labels = np.where(across[None, :], index[:, None], -1)
        grid = np.broadcast_to(frequency[:, None], shape)
    else:
        labels = np.where(across[:, None], index[None, :], -1)
        grid = np.broadcast_to(frequency[None, :], shape)
    return _gathered(labels, grid)


def _gathered(labels: NDArray[np.intp], frequency: Floats) -> Groups:
    """Return groups with labels from 0 up and none of them empty."""
    used = labels >= 0
    kinds, inverse = np.unique(labels[used], return_inverse=True)
    compact = np.full(labels.shape, -1, dtype=np.intp)
    compact[used] = inverse
    bins = np.bincount(inverse, minlength=len(kinds)).astype(float)
    mean = np.bincount(inverse, frequency[used], minlength=len(kinds)) / bins
    return Groups(compact, mean, bins)
