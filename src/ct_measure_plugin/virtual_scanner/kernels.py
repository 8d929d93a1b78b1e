"""Reconstruction kernels: the ramp times a window A(f), 0 beyond a cut-off."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    FloatArray = NDArray[np.float64]

__all__ = ["KERNEL_SHAPES", "Kernel"]

Shape = Literal["ramp", "cosine", "hann", "butterworth", "enhancing"]
KERNEL_SHAPES: tuple[Shape, ...] = ("ramp", "cosine", "hann", "butterworth", "enhancing")


@dataclass(frozen=True, slots=True)
class Kernel:
    """A window on the ramp filter.

    Parameters
    ----------
    shape : {"ramp", "cosine", "hann", "butterworth", "enhancing"}
        With u = f / cut-off: 1; cos(πu/2); (1 + cos πu)/2; 1/√(1 + (u/b)^2n);
        (1 + g u²)(1 + cos πu)/2.
    cutoff_per_mm : float
        Beyond it A is 0; at most half the reciprocal of the channel pitch.
    bend : float
        "butterworth": b, where A² has fallen to one half, as a fraction of the cut-off.
    order : int
        "butterworth": n.
    gain : float
        "enhancing": g. A exceeds 1 for g above π²/4; at 6 it peaks at 1.285 at u = 0.42.

    Notes
    -----
    The enhancing window is this project's own. All are 1 at f = 0.

    Examples
    --------
    >>> Kernel("hann", 1.0).window([0.0, 0.5, 1.0]).tolist()
    [1.0, 0.5, 0.0]
    """

    shape: Shape = "hann"
    cutoff_per_mm: float = 1.0
    bend: float = 0.6
    order: int = 3
    gain: float = 6.0

    def __post_init__(self) -> None:
        if self.shape not in KERNEL_SHAPES:
            raise ArgumentError("shape", f"must be one of {', '.join(KERNEL_SHAPES)}", self.shape)
        for name in ("cutoff_per_mm", "bend", "gain"):
            if not 0 < getattr(self, name) < math.inf:
                raise ArgumentError(name, "must be greater than 0", getattr(self, name))
        if self.order < 1:
            raise ArgumentError("order", "must be at least 1", self.order)

    def window(self, frequency_per_mm: ArrayLike) -> FloatArray:
        """Return A at frequencies in mm⁻¹; at the cut-off itself still the formula's value."""
        u = np.abs(np.asarray(frequency_per_mm, dtype=float)) / self.cutoff_per_mm
        if self.shape == "ramp":
            values = np.ones_like(u)
        elif self.shape == "cosine":
            values = np.cos(0.5 * np.pi * u)
        elif self.shape == "butterworth":
            values = 1.0 / np.sqrt(1.0 + (u / self.bend) ** (2 * self.order))
        else:
            values = 0.5 * (1.0 + np.cos(np.pi * u))
            if self.shape == "enhancing":
                values = values * (1.0 + self.gain * u**2)
        return np.where(u <= 1.0 + 1e-12, values, 0.0)

    @property
    def label(self) -> str:
        """A short name, e.g. for a DICOM header.

        >>> Kernel("enhancing", 0.8).label
        'ENHANCING 0.8'
        """
        return f"{self.shape.upper()} {self.cutoff_per_mm:g}"
