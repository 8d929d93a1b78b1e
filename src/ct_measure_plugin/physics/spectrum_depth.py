"""What deep patches say of the noise along z."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import fft

from ct_measure_plugin.physics.results import Curve, NotMeasured, Picture

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.radial import Groups

    Floats = NDArray[np.float64]

__all__ = ["Depth", "depth_kernel", "few_slices"]

#: Independent slices that a spectrum along z needs at least.
FEWEST_SLICES = 4.0


def depth_kernel(window: Floats, length: int) -> Floats:
    """Return the correlation of bins along fz by their distance, 1 at distance 0."""
    found: Floats = np.abs(fft.fft(window**2, n=length)) ** 2 / np.sum(window**2) ** 2
    return found


def few_slices(power: Floats, nz: int) -> NotMeasured | None:
    """Refuse deep patches whose slices repeat one another.

    Parameters
    ----------
    power : ndarray, shape of the transform
        The spectrum; its sum over the plane is the transform of the correlation ρ along z.
    nz : int
        Slices in a patch; nz / (1 + 2 Σ (1 − k/nz) ρ_k²) of them count as independent.
    """
    rho = fft.ifft(power.sum(axis=(1, 2))).real
    lags = np.arange(1, nz // 2 + 1)
    rho = rho[lags] / rho[0] if rho[0] > 0 else np.zeros(len(lags))
    slices = nz / (1.0 + 2.0 * float(np.sum((1 - lags / nz) * rho**2)))
    if slices >= FEWEST_SLICES:
        return None
    return NotMeasured(
        f"the {nz} slices of a patch hold {slices:.1f} independent ones; at least"
        f" {FEWEST_SLICES:g} are needed for a spectrum along z",
        "use deeper patches, or measure the spectrum of single slices",
    )


@dataclass(frozen=True, slots=True, eq=False)
class Depth:
    """The frame of a three-dimensional spectrum.

    Attributes
    ----------
    spacing_mm : tuple of float
        dz, dy, dx.
    window : ndarray, shape (nz,)
        The window along z.
    unit : str
        Of the values.
    """

    spacing_mm: tuple[float, ...]
    window: Floats
    unit: str

    def slice_radial(self, power: Floats, rings: Groups, scatter: Floats) -> Curve:
        """Return the spectrum of a single slice, ∫ NPS dfz, over rings.

        `scatter` is the relative covariance of the rings in one plane of the spectrum; the planes
        average out as far as the window along z leaves them independent.
        """
        nz = len(power)
        along = power.sum(axis=(1, 2))
        mixed = fft.ifft(fft.fft(along) * fft.fft(depth_kernel(self.window, nz))).real
        planes = float(np.sum(along * mixed) / along.sum() ** 2)
        y = rings.mean(power.sum(axis=0) / (nz * self.spacing_mm[0]))
        doubt = y * np.sqrt(np.diag(scatter) * planes)
        unit = f"{self.unit}² mm²"
        return Curve(rings.frequency, y, doubt, "frequency", "mm⁻¹", "NPS of a slice", unit)

    def through_plane(self, power: Floats, kernel: Floats) -> Curve:
        """Return ∬ NPS dfx dfy along fz; `kernel` is that of bins within the plane."""
        nz, dz = len(power), self.spacing_mm[0]
        area = math.prod(n * d for n, d in zip(power.shape[1:], self.spacing_mm[1:], strict=True))
        kept = nz // 2 + 1
        along = power.sum(axis=(1, 2))[:kept]
        mixed = fft.ifft2(fft.fft2(power[:kept]) * fft.fft2(kernel)).real
        relative = np.sum(power[:kept] * mixed, axis=(1, 2)) / along**2
        # a plane that is its own mirror image holds every bin twice
        relative[0] *= 2.0
        if nz % 2 == 0:
            relative[-1] *= 2.0
        relative /= 1.0 + float(kernel[0, 0])
        y = along / area
        unit = f"{self.unit}² mm"
        fz = np.arange(kept) / (nz * dz)
        return Curve(fz, y, y * np.sqrt(relative), "fz", "mm⁻¹", "NPS along z", unit)

    def axial(self, power: Floats, rings: Groups) -> Picture:
        """Return the spectrum over fz (rows) and in-plane rings (columns)."""
        nz, dz = len(power), self.spacing_mm[0]
        step = float(np.median(np.diff(rings.frequency)))
        return Picture(
            np.asarray(fft.fftshift(rings.mean(power), axes=0)),
            (1.0 / (nz * dz), step),
            ("fz", "in-plane frequency"),
            ("mm⁻¹", "mm⁻¹"),
            f"{self.unit}² mm³",
            (float(fft.fftshift(fft.fftfreq(nz, dz))[0]), float(rings.frequency[0])),
        )
