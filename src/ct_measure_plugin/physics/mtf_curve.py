"""From a line spread function or a curve to an MTF's named numbers."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import signal

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.results import Caution, Curve, NotMeasured, Quantity, Result

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = [
    "FREQUENCY_STEPS",
    "MtfResult",
    "Spread",
    "checked_spacing",
    "checked_stack",
    "conventional_mtf",
    "curve_numbers",
    "falls_through",
    "level_frequency",
    "width_at",
]

#: Samples of an MTF curve.
FREQUENCY_STEPS = 241

#: The corrections for bin width and difference quotient never exceed this factor.
MOST_CORRECTION = 10.0

#: An MTF above this at the pixels' Nyquist frequency means that the image itself is aliased.
ALIASING = 0.1


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MtfResult(Result):
    """What every MTF measurement answers.

    Attributes
    ----------
    f50, f10, f2 : Quantity or NotMeasured
        Frequencies in mm⁻¹ at which the MTF falls to 50, 10 and 2 % of its value at 0, for good.
        NotMeasured if the curve ends before, or if noise hides the level.
    peak : Quantity
        Largest value of the MTF: 1, or more for an edge-enhancing kernel.
    nyquist : Quantity
        Nyquist frequency of the pixels, 1 / (2 pixel size), mm⁻¹.
    mtf_at_nyquist : Quantity or NotMeasured
        The MTF there.
    mtf : Curve
        The modulation transfer function with its standard uncertainty.
    levels : Curve or None
        Frequencies at which the MTF falls to further levels that were asked for; levels that it
        does not reach, or that lie in the noise, are left out.
    """

    f50: Quantity | NotMeasured
    f10: Quantity | NotMeasured
    f2: Quantity | NotMeasured
    peak: Quantity
    nyquist: Quantity
    mtf_at_nyquist: Quantity | NotMeasured
    mtf: Curve
    levels: Curve | None = None

    def at_level(self, level: float) -> Quantity | NotMeasured:
        """Return the frequency at which the MTF falls to any level, such as 0.2."""
        doubt = self.mtf.y_uncertainty
        return level_frequency(self.mtf.x, self.mtf.y, doubt, level)


@dataclass(frozen=True, slots=True, eq=False)
class Spread:
    """An MTF on its frequencies with standard uncertainties."""

    frequency: Floats
    mtf: Floats
    doubt: Floats | None


def checked_spacing(spacing_mm: tuple[float, float]) -> tuple[float, float]:
    """Return dy, dx as floats, or raise ArgumentError."""
    steps = tuple(float(step) for step in spacing_mm)
    if len(steps) != 2 or not all(math.isfinite(s) and s > 0 for s in steps):
        raise ArgumentError("spacing_mm", "must be (dy, dx), each greater than 0", spacing_mm)
    return steps[0], steps[1]


def checked_stack(image: object, least: int, *, name: str = "image") -> Floats:
    """Return finite slices, shape (nz, ny, nx), of at least `least` pixels a side.

    A 2-D image becomes one slice. Anything else raises ArgumentError.
    """
    values = np.asarray(image, dtype=float)
    values = values[None] if values.ndim == 2 else values
    if values.ndim != 3 or len(values) == 0 or min(values.shape[1:]) < least:
        raise ArgumentError(
            name, f"must be 2-D or 3-D, at least {least} by {least} pixels", values.shape
        )
    if not bool(np.isfinite(values).all()):
        raise ArgumentError(name, "must hold finite numbers only", "NaN or infinity")
    return values


def width_at(x: Floats, y: Floats, share: float) -> float:
    """Return the full width of a peak at a share of its height, linearly interpolated.

    Between the outermost places where it has that height, so that a dip in a noisy peak does
    not cut it in two. A peak that does not fall so low within x has the width of x.

    >>> x = np.linspace(-5, 5, 2001)
    >>> round(width_at(x, np.exp(-x * x / 2), 0.5), 4)
    2.3548
    """
    level = share * float(y.max())
    above = np.flatnonzero(y >= level)
    first, last = int(above[0]), int(above[-1])
    lower, upper = float(x[first]), float(x[last])
    if first > 0:
        lower -= (y[first] - level) / (y[first] - y[first - 1]) * (x[first] - x[first - 1])
    if last < len(x) - 1:
        upper += (y[last] - level) / (y[last] - y[last + 1]) * (x[last + 1] - x[last])
    return float(upper - lower)


def conventional_mtf(
    middles: Floats,
    esf: Floats,
    covariance: Floats,
    *,
    half: float,
    frequency: Floats,
    averaged: float | None = None,
) -> Spread:
    """Bin, differentiate, window, transform, correct: the textbook route.

    Parameters
    ----------
    middles, esf : ndarray, shape (n,)
        Evenly spaced distances in mm and the edge spread function there, each a mean over its bin.
    covariance : ndarray, shape (n, n)
        Noise covariance of the bins.
    half : float
        Half-width of the window in mm.
    frequency : ndarray
        Where to evaluate, mm⁻¹.
    averaged : float, optional
        Width over which pixels are averaged in each bin, mm; the bins' own by default.

    Returns
    -------
    Spread

    Notes
    -----
    Central differences have the transfer function sinc(2fΔ) and bins sinc(fΔ); both are divided
    out, to a factor of at most 10. The window is flat with a tenth tapered at each end. The
    transform is normalised by the difference of the plateaus rather than by its value at zero
    frequency, which would hide missing tails. The uncertainty is the noise covariance carried
    through these linear steps onto the phase of the transform. [1]_ [2]_

    References
    ----------
    .. [1] Judy 1976, Medical Physics 3:233 (edge method in CT).
    .. [2] Cunningham and Fenster 1987, Medical Physics 14:533 (finite differences).
    """
    step = float(middles[1] - middles[0])
    n = len(middles)
    used = np.abs(middles) <= half + step
    window = np.zeros(n)
    window[used] = signal.windows.tukey(int(used.sum()), 0.2)
    kernel = np.exp(-2j * np.pi * np.outer(frequency, middles)) * window
    operator = np.zeros_like(kernel)  # from the esf to the transform of its central difference
    operator[:, 2:] += kernel[:, 1:-1] / 2
    operator[:, :-2] -= kernel[:, 1:-1] / 2
    # plateaus begin where the line spread function has ended
    edge = 0.6 * half
    high, low = middles > edge, middles < -edge
    plateau = high / high.sum() - low / low.sum()
    contrast = float(plateau @ esf)
    spectrum = operator @ esf / contrast
    modulus = np.abs(spectrum)
    correction = np.maximum(np.sinc(2 * frequency * step), 1 / MOST_CORRECTION)
    box = np.sinc(frequency * (step if averaged is None else averaged))
    correction = correction * np.maximum(box, 1 / MOST_CORRECTION)
    mtf = modulus / correction
    phase = np.where(modulus > 0, spectrum.conj() / np.maximum(modulus, 1e-300), 1.0)
    weights = (phase[:, None] * operator).real / contrast - modulus[:, None] * plateau / contrast
    variance = np.einsum("fi,fi->f", weights @ covariance, weights)
    return Spread(frequency, mtf, np.sqrt(np.maximum(variance, 0.0)) / correction)


def falls_through(mtf: Floats, level: float) -> int | None:
    """Return the first index i with mtf[i] at or above a level and the next two below it."""
    below = mtf < level
    stays = below[1:-1] & below[2:] & ~below[:-2]
    found = np.flatnonzero(stays)
    return int(found[0]) if len(found) else None


def level_frequency(
    frequency: Floats,
    mtf: Floats,
    doubt: Floats | None,
    level: float,
    *,
    clear_of_noise: float = 1 / 3,
    slope_over: float = 0.05,
) -> Quantity | NotMeasured:
    """Return where an MTF falls to a level, by linear interpolation, with its uncertainty.

    The uncertainty is that of the MTF there over its slope. NotMeasured if the level lies less
    than `clear_of_noise` uncertainties of the MTF above 0. The slope is taken over ± `slope_over`
    of the frequency.
    """
    i = falls_through(mtf, level)
    if i is None:
        return NotMeasured(
            f"the MTF does not fall to {100 * level:g} % below {frequency[-1]:.3g} mm⁻¹",
            "reconstruct with smaller pixels",
        )
    step = frequency[i + 1] - frequency[i]
    slope = (mtf[i + 1] - mtf[i]) / step
    at = float(frequency[i] + (level - mtf[i]) / slope)
    if doubt is None:
        return Quantity(at, "mm⁻¹")
    spread = float(np.interp(at, frequency, doubt))
    if spread * clear_of_noise > level:
        return NotMeasured(
            f"noise hides the {100 * level:g} % level: the MTF there is uncertain by {spread:.2g}",
            "measure a stronger contrast, a longer edge, or more slices",
        )
    # the slope between neighbours scatters on a noisy curve
    low, high = at * (1 - slope_over), min(at * (1 + slope_over), float(frequency[-1]))
    values = np.interp([low, high], frequency, mtf)
    chord = float(values[0] - values[1]) / (high - low)
    return Quantity(at, "mm⁻¹", spread / (chord if chord > 0 else abs(slope)))


def curve_numbers(
    spread: Spread,
    pixel_mm: float,
    *,
    levels: tuple[float, ...] = (),
    slope_over: float = 0.05,
) -> tuple[dict[str, object], list[Caution]]:
    """Return the fields of an :class:`MtfResult` and the cautions that follow from the curve."""
    f, m, u = spread.frequency, spread.mtf, spread.doubt
    found: dict[str, object] = {
        "f50": level_frequency(f, m, u, 0.5, slope_over=slope_over),
        "f10": level_frequency(f, m, u, 0.1, slope_over=slope_over),
        "f2": level_frequency(f, m, u, 0.02, clear_of_noise=3.0),
    }
    top = int(np.argmax(m))
    found["peak"] = Quantity(float(m[top]), "", None if u is None else float(u[top]))
    nyquist = 0.5 / pixel_mm
    found["nyquist"] = Quantity(nyquist, "mm⁻¹", 0.0)
    cautions = []
    if nyquist <= f[-1]:
        at = float(np.interp(nyquist, f, m))
        doubt = None if u is None else float(np.interp(nyquist, f, u))
        found["mtf_at_nyquist"] = Quantity(at, "", doubt)
        if at > ALIASING + (2 * doubt if doubt else 0.0):
            cautions.append(
                Caution(
                    "aliasing",
                    f"The MTF is still {at:.2f} at the pixels' Nyquist frequency"
                    f" ({nyquist:.3g} mm⁻¹): the image is aliased.",
                    "Reconstruct with smaller pixels.",
                )
            )
    else:
        found["mtf_at_nyquist"] = NotMeasured(
            f"the curve ends at {f[-1]:.3g} mm⁻¹, below Nyquist", "none is needed"
        )
    f10 = found["f10"]
    if isinstance(f10, Quantity) and u is not None:
        floor = float(np.interp(f10.value, f, u))
        if 3 * floor > 0.1:
            cautions.append(
                Caution(
                    "noise-floor",
                    f"At f10 the MTF is uncertain by {floor:.2g}: the level lies in the noise.",
                    "Measure a stronger contrast, a longer edge, or more slices.",
                )
            )
    found["mtf"] = Curve(f, m, u, "frequency", "mm⁻¹", "MTF", "")
    found["levels"] = _levels(spread, levels, slope_over)
    return found, cautions


def _levels(spread: Spread, levels: tuple[float, ...], slope_over: float) -> Curve | None:
    if not levels:
        return None
    if not all(0 < level < 1 for level in levels):
        raise ArgumentError("levels", "must lie between 0 and 1", levels)
    rows = []
    for level in sorted(levels):
        at = level_frequency(
            spread.frequency, spread.mtf, spread.doubt, level, slope_over=slope_over
        )
        if isinstance(at, Quantity):
            rows.append((level, at.value, at.uncertainty or 0.0))
    table = np.array(rows, dtype=float).reshape(-1, 3)
    return Curve(table[:, 0], table[:, 1], table[:, 2], "MTF", "", "frequency", "mm⁻¹")
