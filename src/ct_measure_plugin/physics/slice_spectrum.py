"""What of a measured noise power spectrum is kept for use elsewhere: that of single slices."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.noise_power import NoisePower
    from ct_measure_plugin.physics.results import Curve, Picture, Quantity

    Floats = NDArray[np.float64]

__all__ = ["SliceSpectrum"]


@dataclass(frozen=True, slots=True, eq=False)
class SliceSpectrum:
    """The part of a noise power spectrum from which the doubt of any region's mean follows.

    Attributes
    ----------
    spectrum : Picture
        NPS over (fy, fx), frequency 0 in the middle, as measured.
    radial : Curve
        Its mean over rings of frequency, the smear of the window divided out.
    smear : Curve
        By how much window and ring width raise each ring, as a share.
    lowest_frequency : Quantity
        The first usable ring.
    sd : Quantity
        Square root of the spectrum's integral.
    """

    spectrum: Picture
    radial: Curve
    smear: Curve
    lowest_frequency: Quantity
    sd: Quantity

    @classmethod
    def of(cls, noise: NoisePower | SliceSpectrum) -> SliceSpectrum:
        """Take it from a measured spectrum.

        Raises
        ------
        ArgumentError
            If the spectrum is that of deep patches.

        Examples
        --------
        >>> from ct_measure_plugin.physics import noise_power
        >>> patches = np.random.default_rng(1).normal(0, 10, (40, 32, 32))
        >>> noise = noise_power(patches, spacing_mm=(0.5, 0.4))
        >>> SliceSpectrum.of(noise).spacing_mm
        (0.5, 0.4)
        """
        if isinstance(noise, SliceSpectrum):
            return noise
        if noise.axial is not None:
            raise ArgumentError("noise", "must come from patches on one slice", "deep patches")
        return cls(noise.spectrum, noise.radial, noise.smear, noise.lowest_frequency, noise.sd)

    @property
    def spacing_mm(self) -> tuple[float, float]:
        """Distance of rows and of columns on which it was measured."""
        (rows, columns), (fy, fx) = self.spectrum.values.shape, self.spectrum.spacing
        return round(1.0 / (rows * fy), 9), round(1.0 / (columns * fx), 9)
