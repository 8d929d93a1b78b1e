"""Slow trends taken out of patches: polynomials, and what they take from the noise with them."""

from __future__ import annotations

from functools import lru_cache
from itertools import product
from typing import TYPE_CHECKING, Literal, TypeAlias

import numpy as np
from scipy import fft

from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = [
    "DEGREE",
    "DETRENDS",
    "Detrend",
    "neighbour_differences",
    "polynomial_basis",
    "repeat_differences",
    "retained_share",
]

Detrend: TypeAlias = Literal["none", "mean", "plane", "quadratic", "repeat", "slices"]
DETRENDS: tuple[Detrend, ...] = ("none", "mean", "plane", "quadratic", "repeat", "slices")

#: Degree of the polynomial that each way takes out of every patch; -1 for none. Differences have
#: lost the trend already, and only their mean is taken.
DEGREE: dict[Detrend, int] = {
    "none": -1, "mean": 0, "plane": 1, "quadratic": 2, "repeat": 0, "slices": 0,
}  # fmt: skip


@lru_cache(maxsize=8)
def polynomial_basis(shape: tuple[int, ...], degree: int) -> Floats:
    """Return orthonormal polynomials on a grid, shape (terms, pixels), ordered by degree.

    Parameters
    ----------
    shape : tuple of int
        The grid.
    degree : int
        Largest total degree; -1 gives no term at all.

    Examples
    --------
    >>> basis = polynomial_basis((16, 16), 2)
    >>> basis.shape, bool(np.allclose(basis @ basis.T, np.eye(6)))
    ((6, 256), True)
    """
    axes = [np.linspace(-1.0, 1.0, n) if n > 1 else np.zeros(1) for n in shape]
    powers = [p for p in product(range(degree + 1), repeat=len(shape)) if sum(p) <= degree]
    powers.sort(key=lambda p: (sum(p), p))
    usable = [p for p in powers if all(k < n for k, n in zip(p, shape, strict=True))]
    if not usable:
        return np.zeros((0, int(np.prod(shape))))
    terms = []
    for power in usable:
        term = np.ones(shape)
        for axis, (x, k) in enumerate(zip(axes, power, strict=True)):
            legendre = np.polynomial.legendre.Legendre.basis(k)(x)
            term = term * legendre.reshape([-1 if i == axis else 1 for i in range(len(shape))])
        terms.append(term.ravel())
    q, _ = np.linalg.qr(np.asarray(terms).T)
    basis: Floats = np.ascontiguousarray(q.T)
    basis.setflags(write=False)
    return basis


def retained_share(
    shape: tuple[int, ...], degree: int, window: Floats, transform: tuple[int, ...]
) -> Floats:
    """Return which share of white noise each frequency keeps, shape of the transform.

    Parameters
    ----------
    shape : tuple of int
        Of the patch.
    degree : int
        Of the polynomial taken out; -1 for none.
    window : ndarray, shape `shape`
        The window applied afterwards.
    transform : tuple of int
        Lengths of the Fourier transform.

    Notes
    -----
    With orthonormal polynomials b and window w the expected power at f falls from Σw² to
    Σw² − Σ_b |F(w b)(f)|². It is exact for white noise; noise of another colour keeps a share that
    also depends on its slope, which is why nothing is divided by it.

    Examples
    --------
    >>> kept = retained_share((64, 64), 2, np.ones((64, 64)), (64, 64))
    >>> [round(float(kept[k]), 3) for k in ((0, 0), (0, 1), (1, 1), (0, 2))]
    [0.0, 0.234, 0.907, 0.895]
    """
    basis = polynomial_basis(shape, degree).reshape(-1, *shape)
    axes = tuple(range(1, len(shape) + 1))
    taken = np.abs(fft.fftn(basis * window, s=transform, axes=axes)) ** 2
    kept: Floats = 1.0 - taken.sum(axis=0) / np.sum(window**2)
    return np.clip(kept, 0.0, 1.0)


def repeat_differences(scans: Sequence[Floats]) -> Floats:
    """Return what R repeat scans do not share, as R − 1 independent sets with the noise of one.

    Parameters
    ----------
    scans : sequence of ndarray, each of shape (n, …)
        The same patches from each scan.

    Returns
    -------
    ndarray, shape (n (R − 1), …)
        Contrasts of unit length: for two scans (I1 − I2)/√2, for a third one
        (I1 + I2 − 2 I3)/√6, and so on. Their NPS is that of a single scan.

    Raises
    ------
    ArgumentError
        If there are fewer than two scans or their shapes differ.
    """
    if len(scans) < 2:
        raise ArgumentError("repeats", "must hold at least one more scan", len(scans) - 1)
    shapes = {scan.shape for scan in scans}
    if len(shapes) > 1:
        raise ArgumentError("repeats", f"must have the patches' shape {scans[0].shape}", shapes)
    found = []
    total = np.array(scans[0], dtype=float)
    for k in range(1, len(scans)):
        found.append((total - k * scans[k]) / np.sqrt(k * (k + 1.0)))
        total += scans[k]
    return np.concatenate(found)


def neighbour_differences(patches: Floats, pairs: NDArray[np.intp]) -> Floats:
    """Return (first − second)/√2 of pairs of patches, shape (pairs, …).

    Its variance is that of one patch times 1 − ρ, with ρ the correlation within the pairs.
    """
    found: Floats = (patches[pairs[:, 0]] - patches[pairs[:, 1]]) / np.sqrt(2.0)
    return found
