"""The averaged spectrum of a set of patches, made in blocks that stay in the processor's cache."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal, TypeAlias

import numpy as np
from scipy import fft

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.detrend import polynomial_basis

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.radial import Groups

    Floats = NDArray[np.float64]

__all__ = ["WINDOWS", "PatchSpectra", "Window", "patch_spectra", "window_values"]

Window: TypeAlias = Literal["none", "hann", "hamming", "cosine"]
WINDOWS: tuple[Window, ...] = ("none", "hann", "hamming", "cosine")

#: Values in one block; with its transform it stays within a second-level cache.
BLOCK_VALUES = 1 << 15

#: Polynomials above the second and up to this degree are looked at for structure.
STRUCTURE_DEGREE = 4

#: Relative difference between the power of the spectrum and of the pixels that rounding explains.
PARSEVAL = 1e-9


@dataclass(frozen=True, slots=True, eq=False)
class PatchSpectra:
    """What the patches hold.

    Attributes
    ----------
    power : ndarray, shape of the transform
        Mean NPS in unit² mm^d, frequency 0 first.
    ring_power : ndarray, shape (n, rings)
        The same of each patch, averaged over rings (in the plane fz = 0 of deep patches).
    variance : ndarray, shape (n,)
        Mean square of each patch after detrending.
    raw_variance : ndarray, shape (n,)
        Its variance (n − 1) before detrending.
    skewness, kurtosis : ndarray, shape (n,)
        Of its pixels after detrending; the kurtosis is the excess.
    slow : ndarray, shape (n, terms)
        What polynomials of degree 3 and 4 find in each patch, as coefficients whose squares sum
        to the sum of squares of that part.
    windowed_variance : float
        Mean square of the windowed pixels over the window's mean square.
    pixels : int
        In each patch.
    """

    power: Floats
    ring_power: Floats
    variance: Floats
    raw_variance: Floats
    skewness: Floats
    kurtosis: Floats
    slow: Floats
    windowed_variance: float
    pixels: int


def window_values(kind: Window, n: int) -> Floats:
    """Return a window of n samples, symmetric about the middle of the patch.

    Samples lie at the middles of n equal cells of the window, so that no pixel is given weight 0.

    >>> window_values("hann", 4).round(4).tolist()
    [0.1464, 0.8536, 0.8536, 0.1464]
    """
    if kind not in WINDOWS:
        raise ArgumentError("window", f"must be one of {', '.join(WINDOWS)}", kind)
    phase = np.pi * (np.arange(n) + 0.5) / n
    if kind == "none":
        return np.ones(n)
    if kind == "cosine":
        return np.asarray(np.sin(phase))
    floor = 0.08 if kind == "hamming" else 0.0
    return np.asarray(floor + (1.0 - floor) * np.sin(phase) ** 2)


def patch_spectra(
    patches: Floats,
    *,
    spacing_mm: tuple[float, ...],
    degree: int,
    windows: tuple[Floats, ...],
    transform: tuple[int, ...],
    groups: Groups,
    keep: Floats | None = None,
) -> PatchSpectra:
    """Detrend, window and transform patches, and average their power.

    Parameters
    ----------
    patches : ndarray, shape (n, ny, nx) or (n, nz, ny, nx)
        In any real type; read block by block.
    degree : int
        Of the polynomial taken out of each patch; -1 for none.
    windows : tuple of ndarray
        The window along each axis.
    transform : tuple of int
        Lengths of the transform; longer than the patch pads it with zeros.
    groups : Groups
        Rings in the plane of the last two axes.
    keep : ndarray, shape (n, pixels), optional
        Takes the detrended patches.

    Notes
    -----
    S = Π d / Σw² · ⟨|F(w ΔI)|²⟩, which for a flat window is (dx dy / Nx Ny) ⟨|F(ΔI)|²⟩: the power
    lost to the window is given back, and padding adds none.

    Raises
    ------
    ArithmeticError
        If the integral of the spectrum is not the variance of the windowed pixels (Parseval); the
        code would be wrong.
    """
    n, shape = len(patches), patches.shape[1:]
    pixels = math.prod(shape)
    window = windows[0]
    for other in windows[1:]:
        window = window[..., None] * other
    scale = math.prod(spacing_mm) / float(np.sum(window**2))
    work = _Work(shape, degree, window if np.any(window != 1.0) else None, transform, groups)
    half = (*transform[:-1], transform[-1] // 2 + 1)
    total = np.zeros(half)
    rows: list[tuple[Floats, ...]] = []
    block = max(1, BLOCK_VALUES // pixels)
    for start in range(0, n, block):
        stop = min(start + block, n)
        row, power = work.block(np.asarray(patches[start:stop], dtype=float), keep, start)
        total += power
        rows.append(row)
    ring, square, raw, cube, fourth, slow, weighted = (
        np.concatenate(r) for r in zip(*rows, strict=True)
    )
    power = _both_halves(total * (scale / n), transform)
    windowed = float(weighted.mean()) / float(np.mean(window**2))
    integral = float(power.sum()) / math.prod(
        m * d for m, d in zip(transform, spacing_mm, strict=True)
    )
    if not math.isclose(integral, windowed, rel_tol=PARSEVAL, abs_tol=1e-300):
        raise ArithmeticError(f"Parseval fails: {integral!r} in frequency, {windowed!r} in pixels")
    safe = np.where(square > 0, square, 1.0)
    return PatchSpectra(
        power=power,
        ring_power=ring * scale,
        variance=square,
        raw_variance=raw,
        skewness=cube / safe**1.5,
        kurtosis=np.where(square > 0, fourth / safe**2 - 3.0, 0.0),
        slow=slow,
        windowed_variance=windowed,
        pixels=pixels,
    )


class _Work:
    """What every block needs, made once."""

    def __init__(
        self,
        shape: tuple[int, ...],
        degree: int,
        window: Floats | None,
        transform: tuple[int, ...],
        groups: Groups,
    ) -> None:
        self.shape, self.transform = shape, transform
        self.basis = polynomial_basis(shape, STRUCTURE_DEGREE)
        self.taken = len(polynomial_basis(shape, degree))
        self.slow = len(polynomial_basis(shape, 2))
        self.window = None if window is None else window.ravel()
        columns = transform[-1] // 2 + 1
        labels = groups.labels[:, :columns]
        used = np.flatnonzero(labels.ravel() >= 0)
        # bins that stand for their mirror image too
        twice = np.full(labels.shape, 2.0)
        twice[:, 0] = 1.0
        if transform[-1] % 2 == 0:
            twice[:, -1] = 1.0
        self.used = used
        self.rings = np.zeros((len(used), len(groups.bins)))
        self.rings[np.arange(len(used)), labels.ravel()[used]] = twice.ravel()[used]
        self.rings /= groups.bins

    def block(
        self, values: Floats, keep: Floats | None, start: int
    ) -> tuple[tuple[Floats, ...], Floats]:
        """Return a block's figures a patch, and the sum of its powers over half the plane."""
        m = len(values)
        flat = values.reshape(m, -1)
        # a large common level would cost digits in the transform
        level = flat.mean(axis=1, keepdims=True) if self.taken else 0.0
        flat = flat - level
        pixels = flat.shape[1]
        found = flat @ self.basis.T
        raw = np.einsum("ij,ij->i", flat, flat) - found[:, 0] ** 2
        slow = found[:, self.slow :]
        if self.taken:
            flat -= found[:, : self.taken] @ self.basis[: self.taken]
        square = flat * flat
        second = square.mean(axis=1)
        third = np.einsum("ij,ij->i", square, flat) / pixels
        fourth = np.einsum("ij,ij->i", square, square) / pixels
        if keep is not None:
            keep[start : start + m] = flat
        weighted = second
        if self.window is not None:
            flat = flat * self.window
            weighted = np.einsum("ij,ij->i", flat, flat) / pixels
        spectrum = fft.rfftn(
            flat.reshape(m, *self.shape), s=self.transform, axes=range(1, len(self.shape) + 1)
        )
        power = spectrum.real**2
        power += spectrum.imag**2
        plane = power if power.ndim == 3 else power[:, 0]
        ring = plane.reshape(m, -1)[:, self.used] @ self.rings
        rows = (ring, second, raw / (pixels - 1), third, fourth, slow, weighted)
        return rows, power.sum(axis=0)


def _both_halves(half: Floats, transform: tuple[int, ...]) -> Floats:
    """Return the whole spectrum of real data from the half that is not a mirror image."""
    full = np.empty(transform)
    columns = half.shape[-1]
    full[..., :columns] = half
    mirrored = half[..., 1 : transform[-1] - columns + 1]
    for axis in range(half.ndim - 1):
        mirrored = np.roll(np.flip(mirrored, axis), 1, axis)
    full[..., columns:] = mirrored[..., ::-1]
    return full
