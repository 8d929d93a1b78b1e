"""Objects to be detected, and the eye that looks for them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal, TypeAlias, get_args

import numpy as np
from scipy import special

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.results import Quantity

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["EYES", "Eye", "Shape", "Task", "auc_of"]

#: Half the width of a 95 % interval, in standard uncertainties.
INTERVAL = 1.96

Shape: TypeAlias = Literal["disc", "gaussian", "designer"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Task:
    """A round object on a slice.

    Attributes
    ----------
    contrast_hu : float
        Difference to the background at its middle, before the system blurs it.
    size_mm : float
        Radius of a disc or of a designer profile; standard deviation of a Gaussian.
    shape : {"disc", "gaussian", "designer"}
        Profile C, C exp(−r²/2s²), or C (1 − (r/R)²)ⁿ within R.
    exponent : float
        n of the designer profile.
    """

    contrast_hu: float
    size_mm: float
    shape: Shape = "disc"
    exponent: float = 1.0

    def __post_init__(self) -> None:
        if self.contrast_hu == 0 or not math.isfinite(self.contrast_hu):
            raise ArgumentError("contrast_hu", "must be finite and not 0", self.contrast_hu)
        if not 0 < self.size_mm < math.inf:
            raise ArgumentError("size_mm", "must be greater than 0", self.size_mm)
        if self.shape not in get_args(Shape):
            raise ArgumentError("shape", f"must be one of {', '.join(get_args(Shape))}", self.shape)
        if not 0 <= self.exponent <= 20:
            raise ArgumentError("exponent", "must be from 0 to 20", self.exponent)

    def spectrum(self, frequency: Floats) -> Floats:
        """Return the object's Fourier transform, HU mm².

        Notes
        -----
        C π R² Γ(n + 1) J_(n+1)(2πRf) / (πRf)^(n+1) for the designer profile (A. E. Burgess, F. L.
        Jacobson and P. F. Judy, Med. Phys. 28 (2001) 419; reference from memory, formula from
        Sonine's integral), of which a disc is n = 0; 2π C s² exp(−2π² s² f²) for a Gaussian.

        Examples
        --------
        >>> task = Task(contrast_hu=10, size_mm=3, shape="designer", exponent=1.5)
        >>> task.spectrum(np.array([0.05, 0.2, 0.4])).round(4).tolist()
        [106.0963, 35.0669, -4.0521]
        """
        f = np.asarray(frequency, dtype=float)
        size, contrast = self.size_mm, self.contrast_hu
        if self.shape == "gaussian":
            gauss: Floats = 2 * np.pi * contrast * size**2 * np.exp(-2 * (np.pi * size * f) ** 2)
            return gauss
        n = self.exponent if self.shape == "designer" else 0.0
        u = np.pi * size * f
        small = u < 1e-6
        safe = np.where(small, 1.0, u)
        shape = special.gamma(n + 1) * special.jv(n + 1, 2 * safe) / safe ** (n + 1)
        return contrast * np.pi * size**2 * np.where(small, 1.0 / (n + 1), shape)


@dataclass(frozen=True, slots=True, kw_only=True)
class Eye:
    """The eye's response ρⁿ exp(−c ρᵐ) to ρ cycles a degree.

    Attributes
    ----------
    power, decay, bend : float
        n, c and m. The default peaks at 4 cycles a degree, as A. E. Burgess used (constants from
        memory).
    distance_mm : float
        From the eye to the screen.
    zoom : float
        mm on the screen a mm of the object.
    """

    power: float = 1.3
    decay: float = 1.3 / 32.0
    bend: float = 2.0
    distance_mm: float = 500.0
    zoom: float = 1.0

    def __post_init__(self) -> None:
        for name in ("power", "decay", "bend", "distance_mm", "zoom"):
            value = getattr(self, name)
            if not 0 < value < math.inf:
                raise ArgumentError(name, "must be greater than 0", value)

    def response(self, frequency: Floats) -> Floats:
        """Return the response at frequencies in mm⁻¹ of the object.

        >>> eye = Eye()
        >>> f = np.linspace(0.01, 2, 2000)
        >>> round(float(f[eye.response(f).argmax()]) * 8.727, 1)  # cycles a degree at 500 mm
        4.0
        """
        degree = math.pi / 180 * self.distance_mm / self.zoom
        rho = np.asarray(frequency, dtype=float) * degree
        found: Floats = rho**self.power * np.exp(-self.decay * rho**self.bend)
        return found


#: Responses by name, with constants from memory: that of A. E. Burgess, and the one commonly
#: attributed to M. P. Eckstein et al., Opt. Express 11 (2003) 460, which peaks at 2.3.
EYES: dict[str, Eye] = {
    "Burgess": Eye(),
    "Eckstein": Eye(power=1.5, decay=0.68, bend=0.98),
}


def auc_of(index: Quantity) -> Quantity:
    """Return the area under the ROC curve of an index, Φ(d′/√2), with its uncertainty.

    The area bends towards 1: its uncertainty is a 1.96th of how far the lower end of the index's
    95 % interval takes it, so that ±1.96 of it hold the area as often as those of the index do.

    >>> str(auc_of(Quantity(0.1, "", 0.1))), round(auc_of(Quantity(2.0, "")).value, 4)
    ('0.528 ± 0.028', 0.9214)
    """
    area = float(special.ndtr(index.value / math.sqrt(2)))
    if index.uncertainty is None:
        return Quantity(area, "")
    ends = special.ndtr((index.value + INTERVAL * index.uncertainty * np.array([-1, 1])) / 2**0.5)
    return Quantity(area, "", float(np.abs(ends - area).max()) / INTERVAL)
