"""Edge and line spread function with their bands, and the widths that are read from them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import signal

from ct_measure_plugin.physics.esf_basis import REACH, dictionary
from ct_measure_plugin.physics.mtf_curve import width_at
from ct_measure_plugin.physics.results import Curve, NotMeasured, Quantity

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.esf_fit import EsfFit

    Floats = NDArray[np.float64]

__all__ = ["Shape", "conventional_shape", "fitted_shape"]

#: Slope of a Gaussian at half its height, in heights a standard deviation: sqrt(2 ln 2) / 2.
GAUSSIAN_SLOPE = math.sqrt(2 * math.log(2)) / 2

#: Noise of the line spread function, in areas a FWHM, beyond which its width is not read: a
#: Gaussian's peak is 0.94, and three times this would stand at its half.
MOST_LSF_NOISE = 0.15


@dataclass(frozen=True, slots=True, eq=False)
class Shape:
    """Edge and line spread function and what is read from them.

    Attributes
    ----------
    esf, lsf : Curve
        Over the distance in mm, with standard uncertainties.
    contrast, width, overshoot : Quantity
        Step; FWHM of the line spread function, mm; rise over the plateau relative to the step.
    shift : float
        Where the fit finds the edge, mm.
    """

    esf: Curve
    lsf: Curve
    contrast: Quantity
    width: Quantity | NotMeasured
    overshoot: Quantity
    shift: float = 0.0


def fitted_shape(fit: EsfFit, fwhm: float, unit: str) -> Shape:
    """Return the shape of a fitted edge."""
    shapes, s, step = dictionary(), fit.scale, fit.contrast
    half = np.linspace(0, 6 * fwhm, 181)
    d = np.concatenate([-half[:0:-1], half])
    edges, lines = shapes.edges(half / s), shapes.lines(half / s) / s
    edges = np.concatenate([-edges[:0:-1], edges])
    lsf = lines @ fit.mix / step
    lsf, band = (np.concatenate([v[:0:-1], v]) for v in (lsf, fit.doubt(lines / step)))
    esf = fit.level + fit.gradient * d + edges @ fit.mix
    rise = edges @ fit.mix / step - 0.5
    top = int(np.argmax(rise))
    overshoot = max(0.0, float(rise[top]))
    if top == len(d) - 1:  # none: what could have hidden is looked for where one would stand
        top = int(np.searchsorted(d, 1.5 * fwhm))
    width = width_at(d, lsf, 0.5)
    ends = shapes.slopes(np.array([width / 2 / s])) / s**2
    slope = -float(ends[0] @ fit.mix) / step
    whole = 2 * shapes.edges(np.array([REACH]))
    at_half = shapes.lines(np.array([width / 2 / s, 0.0])) / s
    rows = np.stack(
        [
            whole[0],
            2 * (at_half[0] - at_half[1] / 2) / (step * slope) if slope > 0 else 0 * whole[0],
            (edges[top] - (rise[top] + 0.5) * whole[0]) / step,
        ]
    )
    doubts = fit.doubt(rows)
    level = np.stack([np.ones_like(d), np.zeros_like(d), d], axis=1)
    return Shape(
        Curve(d, esf, fit.doubt(edges, level), "distance", "mm", "ESF", unit),
        Curve(d, lsf, band, "distance", "mm", "LSF", "mm⁻¹"),
        Quantity(step, unit, float(doubts[0])),
        Quantity(width, "mm", float(doubts[1]) if slope > 0 else None),
        Quantity(overshoot, "", float(doubts[2])),
        fit.shift,
    )


def conventional_shape(
    middles: Floats, esf: Floats, covariance: Floats, *, half: float, fwhm: float, unit: str
) -> Shape:
    """Return the shape of a binned edge.

    The curves are the bins and their central differences. Width and overshoot are read from a
    moving polynomial of fourth order over one FWHM (Samei, Flynn and Reimann 1998, Medical
    Physics 25:102), because the highest of many noisy bins says nothing.
    """
    edge = 0.6 * half
    high, low = middles > edge, middles < -edge
    plateau = high / high.sum() - low / low.sum()
    contrast = float(plateau @ esf)
    bin_mm = float(middles[1] - middles[0])
    span = 2 * max(3, round(0.5 * fwhm / bin_mm)) + 1
    inner = np.arange(span // 2, len(esf) - span // 2)
    level, slope = (_moving(span, bin_mm, deriv, len(esf)) for deriv in (0, 1))
    top = int(np.argmax(level @ esf / contrast))
    excess = (level[top] - high / high.sum()) / contrast
    width, weights = _width(middles[inner], slope @ esf / contrast, slope / contrast)
    rows = np.stack([plateau, excess, weights, slope[len(slope) // 2] / contrast])
    doubts = np.sqrt(np.maximum(np.sum((rows @ covariance) * rows, axis=1), 0.0))
    hidden = float(doubts[3]) * fwhm > MOST_LSF_NOISE
    lsf, band = np.zeros_like(esf), np.zeros_like(esf)
    lsf[1:-1] = (esf[2:] - esf[:-2]) / (2 * bin_mm * contrast)
    auto = np.diag(covariance)
    pairs = auto[2:] + auto[:-2] - 2 * np.diag(covariance, 2)
    band[1:-1] = np.sqrt(np.maximum(pairs, 0.0)) / (2 * bin_mm * abs(contrast))
    return Shape(
        Curve(middles, esf, np.sqrt(auto), "distance", "mm", "ESF", unit),
        Curve(middles, lsf, band, "distance", "mm", "LSF", "mm⁻¹"),
        Quantity(contrast, unit, float(doubts[0])),
        NotMeasured(
            f"noise hides the width of the line spread function: {doubts[3]:.2g} mm⁻¹ of it",
            "measure it with the fitted method, or average more slices",
        )
        if hidden
        else Quantity(width, "mm", float(doubts[2])),
        Quantity(max(0.0, float(excess @ esf)), "", float(doubts[1])),
    )


def _moving(span: int, step: float, derivative: int, n: int) -> Floats:
    """Return the moving fourth-order polynomial as a matrix, shape (n - span + 1, n)."""
    weights = signal.savgol_coeffs(span, 4, deriv=derivative, delta=step, use="dot")
    rows = n - span + 1
    found = np.zeros((rows, n))
    index = np.arange(rows)[:, None]
    found[index, index + np.arange(span)] = weights
    return found


def _width(d: Floats, line: Floats, slope: Floats) -> tuple[float, Floats]:
    """Return the FWHM of a line spread function ``line = slope @ esf`` and how bins move it."""
    width = width_at(d, line, 0.5)
    peak = int(np.argmax(line))
    ends = np.searchsorted(d, d[peak] + np.array([-0.5, 0.5]) * width)
    ends = np.clip(ends, 0, len(d) - 1)
    steep = GAUSSIAN_SLOPE * float(line[peak]) * 2.3548 / width
    weights: Floats = (slope[ends].sum(axis=0) - slope[peak]) / steep
    return width, weights
