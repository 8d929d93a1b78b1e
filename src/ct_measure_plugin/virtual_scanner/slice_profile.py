"""Slice profiles: how much of each z enters one slice."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np
from scipy.special import erf

from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    FloatArray = NDArray[np.float64]

__all__ = ["SliceProfile"]

#: A Gaussian-like profile ends here, in units of its standard deviation.
GAUSSIAN_END = 3.5


@dataclass(frozen=True, slots=True)
class SliceProfile:
    """A slice sensitivity profile of unit area, symmetric about the slice's position.

    Parameters
    ----------
    shape : {"rectangular", "trapezoid", "gaussian"}
        Ideal collimation; collimation with a penumbra; a Gaussian cut off at 3.5 standard
        deviations and rescaled.
    width_mm : float
        Full width at half maximum, greater than 0.
    penumbra : float
        Trapezoid only: width of each sloping side as a fraction of `width_mm`, 0 < p <= 1 (1
        makes a triangle).

    Examples
    --------
    >>> profile = SliceProfile("trapezoid", 3.0, penumbra=0.2)
    >>> profile.relative([0.0, 1.5, 1.8]).round(6).tolist()
    [1.0, 0.5, 0.0]
    """

    shape: Literal["rectangular", "trapezoid", "gaussian"] = "rectangular"
    width_mm: float = 1.0
    penumbra: float = 0.2

    def __post_init__(self) -> None:
        if self.shape not in ("rectangular", "trapezoid", "gaussian"):
            raise ArgumentError(
                "shape", "must be 'rectangular', 'trapezoid' or 'gaussian'", self.shape
            )
        if not 0 < self.width_mm < math.inf:
            raise ArgumentError("width_mm", "must be greater than 0", self.width_mm)
        if not 0 < self.penumbra <= 1:
            raise ArgumentError("penumbra", "must lie in 0 < p <= 1", self.penumbra)

    @property
    def sigma_mm(self) -> float:
        """Standard deviation of the uncut Gaussian of this width."""
        return self.width_mm / (2.0 * math.sqrt(2.0 * math.log(2.0)))

    @property
    def reach_mm(self) -> float:
        """Half-width of the support: nothing beyond it enters the slice."""
        if self.shape == "rectangular":
            return 0.5 * self.width_mm
        if self.shape == "trapezoid":
            return 0.5 * self.width_mm * (1.0 + self.penumbra)
        return GAUSSIAN_END * self.sigma_mm

    def relative(self, z_mm: ArrayLike) -> FloatArray:
        """Return the profile relative to its peak at distances z from the slice's position.

        At a rectangular profile's very edge the value is one half.
        """
        z = np.abs(np.asarray(z_mm, dtype=float))
        half = 0.5 * self.width_mm
        if self.shape == "rectangular":
            return np.where(z < half, 1.0, np.where(z == half, 0.5, 0.0))
        if self.shape == "trapezoid":
            ramp = self.penumbra * self.width_mm
            return np.asarray(np.clip(0.5 - (z - half) / ramp, 0.0, 1.0))
        bell = np.exp(-0.5 * (z / self.sigma_mm) ** 2)
        return np.where(z <= self.reach_mm, bell, 0.0)

    def share_below(self, z_mm: ArrayLike) -> FloatArray:
        """Return the share of the profile's area below z: 0 to 1, exactly so at its ends."""
        z = np.clip(np.asarray(z_mm, dtype=float), -self.reach_mm, self.reach_mm)
        if self.shape == "rectangular":
            return np.asarray(0.5 + z / self.width_mm)
        if self.shape == "trapezoid":
            return self._trapezoid_share(z)
        scale = self.sigma_mm * math.sqrt(2.0)
        end = math.erf(GAUSSIAN_END / math.sqrt(2.0))
        share: FloatArray = 0.5 + 0.5 * erf(z / scale) / end
        return np.where(np.abs(z) == self.reach_mm, np.where(z > 0, 1.0, 0.0), share)

    def _trapezoid_share(self, z: FloatArray) -> FloatArray:
        ramp = self.penumbra * self.width_mm
        flat_end = 0.5 * (self.width_mm - ramp)
        beyond = np.maximum(np.abs(z) - flat_end, 0.0)
        flat = np.minimum(np.abs(z), flat_end)
        half_area = (flat + beyond - 0.5 * beyond**2 / ramp) / self.width_mm
        return np.asarray(0.5 + np.sign(z) * half_area)

    def share(self, low_mm: float, high_mm: float) -> float:
        """Return the share of the profile's area between two distances from its centre.

        >>> SliceProfile("rectangular", 4.0).share(0.0, 1.0)
        0.25
        """
        low, high = self.share_below([low_mm, high_mm]).tolist()
        return round(max(float(high) - float(low), 0.0), 12)
