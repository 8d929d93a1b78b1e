"""Modulation of bar patterns from the standard deviation over them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from scipy import interpolate

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.bar_groups import Group, NoiseFacts, measured_group
from ct_measure_plugin.physics.edge_noise import residual_spectrum
from ct_measure_plugin.physics.mtf_curve import checked_spacing
from ct_measure_plugin.physics.results import Caution, Curve, NotMeasured, Quantity, Result

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

__all__ = ["BarPattern", "bar_pattern"]

#: Odd harmonics whose power is taken away from a group's, with their Möbius numbers over their
#: squares: the inverse of a square wave's series over odd k without repeated factors.
SERIES = {3: -1 / 9, 5: -1 / 25, 7: -1 / 49, 11: -1 / 121, 13: -1 / 169, 15: 1 / 225}

#: Power of the bars over the uncertainty of the noise's below which a group is unresolved.
LEAST_POWER = 2.0

#: Fewest pixels a side.
LEAST_PIXELS = 8


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class BarPattern(Result):
    """MTF at the frequencies of bar groups.

    Attributes
    ----------
    f50, f10 : Quantity or NotMeasured
        Frequencies at which the MTF falls to 50 and 10 %, between groups, mm⁻¹.
    highest : Quantity or NotMeasured
        Frequency of the finest group that stands out of the noise, mm⁻¹.
    contrast, noise : Quantity
        Bar minus background, and SD in both.
    mtf : Curve
        The MTF of the resolved groups with its standard uncertainty.
    modulation : Curve
        SD of the bars without noise over half the contrast: 1 for coarse square bars.
    """

    f50: Quantity | NotMeasured
    f10: Quantity | NotMeasured
    highest: Quantity | NotMeasured
    contrast: Quantity
    noise: Quantity
    mtf: Curve
    modulation: Curve


def bar_pattern(
    groups: Sequence[ArrayLike],
    frequencies: Sequence[float],
    bar: ArrayLike,
    background: ArrayLike,
    *,
    spacing_mm: tuple[float, float],
    unit: str = "HU",
) -> BarPattern | NotMeasured:
    """Return the MTF from bar groups by the SD of their pixels [1]_.

    Parameters
    ----------
    groups : sequence of array, shape (ny, nx)
        A box within each group, over four periods or more.
    frequencies : sequence of float
        Bar pairs a mm of each group, in the same order.
    bar, background : array, shape (ny, nx)
        Boxes of the bars' material and of what is between them, without structure.
    spacing_mm : (float, float)
        dy, dx.
    unit : str
        Unit of the values.

    Returns
    -------
    BarPattern or NotMeasured
        NotMeasured if no group can be measured.

    Raises
    ------
    ArgumentError
        If an argument is out of its range.

    Notes
    -----
    With the noise's variance N² taken away, bars and gaps of equal width have the power
    ``M² = M0² (8/π²) Σ MTF(kf)²/k²`` over odd k, M0 half the contrast. Where the third harmonic has
    died out the MTF is ``(π/√8) M/M0``; elsewhere the series is inverted with the powers of the
    finer groups, interpolated between them. Pixels are weighted by a Hann window over the box, so
    that a box need not hold whole periods.

    References
    ----------
    .. [1] Droege and Morin 1982, Medical Physics 9:758 (the series derived anew).

    Examples
    --------
    >>> x = np.tile(np.arange(160) * 0.25, (60, 1))
    >>> def wave(f):  # a square wave through a Gaussian of 0.3 mm
    ...     k = np.arange(1, 40, 2)[:, None, None]
    ...     blur = np.exp(-2 * (np.pi * 0.3 * k * f) ** 2)
    ...     return 200 * np.sum(blur * np.sin(2 * np.pi * k * f * x) / k, axis=0) / np.pi
    >>> flat = np.full((60, 60), 50.0)
    >>> found = bar_pattern(
    ...     [wave(0.2), wave(0.6), wave(0.9)], [0.2, 0.6, 0.9], flat, -flat, spacing_mm=(0.25, 0.25)
    ... )
    >>> found.mtf.y.round(2), np.exp(-2 * (np.pi * 0.3 * found.mtf.x) ** 2).round(2)
    (array([0.93, 0.53, 0.24]), array([0.93, 0.53, 0.24]))
    """
    steps = checked_spacing(spacing_mm)
    boxes = [_checked(group, f"groups[{i}]") for i, group in enumerate(groups)]
    pairs = _checked_frequencies(frequencies, len(boxes))
    uniform = [_checked(bar, "bar"), _checked(background, "background")]
    contrast = float(uniform[0].mean() - uniform[1].mean())
    facts = [_noise(box, steps) for box in uniform]
    variances, doubts, means, shares = zip(*facts, strict=True)
    variance = float(np.mean(variances))
    doubt = math.hypot(*doubts) / 2
    if abs(contrast) < 5 * math.hypot(*means) or contrast == 0:
        return NotMeasured(
            f"bar and background differ by {contrast:.3g}, which does not stand out",
            "draw them on the two materials of the bars",
        )
    found, cautions = [], []
    for box, f in zip(boxes, pairs, strict=True):
        noise = NoiseFacts(variance, doubt, float(np.mean(shares)))
        one = measured_group(box, f, steps, noise, abs(contrast) / 2)
        if isinstance(one, Caution):
            cautions.append(one)
        else:
            found.append(one)
    found.sort(key=lambda group: group.frequency)
    resolved = [g for g in found if g.power > LEAST_POWER * g.doubt]
    if not resolved:
        return NotMeasured(
            "no group stands out of the noise" if found else "no group can be measured",
            "measure coarser bars, or average more slices",
            tuple(cautions),
        )
    numbers = _numbers(found, resolved, abs(contrast) / 2, math.hypot(*means))
    sd = math.sqrt(variance)
    return BarPattern(
        **numbers,
        contrast=Quantity(contrast, unit, math.hypot(*means)),
        noise=Quantity(sd, unit, doubt / (2 * sd) if sd > 0 else 0.0),
        cautions=(*cautions, *_unresolved(found)),
    )


def _checked(values: ArrayLike, name: str) -> Floats:
    box = np.asarray(values, dtype=np.float64)
    if box.ndim != 2 or min(box.shape) < LEAST_PIXELS:
        raise ArgumentError(
            name, f"must be 2-D, at least {LEAST_PIXELS} by {LEAST_PIXELS} pixels", box.shape
        )
    if not bool(np.isfinite(box).all()):
        raise ArgumentError(name, "must hold finite numbers only", "NaN or infinity")
    return box


def _checked_frequencies(frequencies: Sequence[float], count: int) -> list[float]:
    pairs = [float(f) for f in frequencies]
    if len(pairs) != count or count == 0:
        raise ArgumentError("frequencies", f"must be one a group ({count})", frequencies)
    if not all(math.isfinite(f) and f > 0 for f in pairs):
        raise ArgumentError("frequencies", "must be greater than 0", frequencies)
    return pairs


def _noise(box: Floats, steps: tuple[float, float]) -> tuple[float, float, float, float]:
    """Return a uniform box's variance, its doubt, its mean's doubt, and its share of independence.

    The last is how many independent pixels tell a variance as well as one of these.
    """
    left = box - box.mean()
    spectrum = residual_spectrum(left, steps)
    variance = float(np.mean(left**2)) * box.size / (box.size - 1)
    if variance == 0:
        return 0.0, 0.0, 0.0, 1.0
    independent = spectrum.independent(box.shape)
    low = float(spectrum.power[0]) / (box.size * steps[0] * steps[1])
    doubt = variance * math.sqrt(2 / max(independent - 1, 1))
    return variance, doubt, math.sqrt(low), independent / box.size


def _numbers(
    found: list[Group], resolved: list[Group], half: float, contrast_doubt: float
) -> dict[str, Any]:
    """Return curves and frequencies; half is M0, half the contrast."""
    f = np.array([g.frequency for g in resolved])
    power = np.array([g.power for g in resolved]) / half**2
    doubt = np.array([g.doubt for g in resolved]) / half**2
    square = power.copy()
    variance = doubt**2
    finest = found[-1]
    for k, share in SERIES.items():
        for i, at in enumerate(f):
            value, of_value = _power_at(found, k * float(at), half)
            square[i] += share * value
            variance[i] += (share * of_value) ** 2
            if k * at > finest.frequency and finest.power > LEAST_POWER * finest.doubt:
                # what lies beyond the finest group is unknown: between nothing and that group's
                variance[i] += (share * finest.power / half**2) ** 2 / 3
    square = np.maximum(square, 0.0)
    mtf = math.pi / math.sqrt(8) * np.sqrt(square)
    scale = contrast_doubt / (2 * half)
    u = np.hypot(math.pi**2 / 16 * np.sqrt(variance) / np.maximum(mtf, 1e-6), mtf * scale)
    modulation = np.sqrt(power)
    return {
        "f50": _level(f, mtf, u, 0.5),
        "f10": _level(f, mtf, u, 0.1),
        "highest": Quantity(float(f[-1]), "mm⁻¹", 0.0),
        "mtf": Curve(f, mtf, u, "frequency", "mm⁻¹", "MTF", ""),
        "modulation": Curve(
            f, modulation, doubt / (2 * modulation), "frequency", "mm⁻¹", "modulation", ""
        ),
    }


def _power_at(found: list[Group], frequency: float, half: float) -> tuple[float, float]:
    """Return the relative power of bars of any frequency, between groups, and its uncertainty.

    1 at frequency 0, and 0 beyond the finest group.
    """
    f = np.array([0.0, *(g.frequency for g in found)])
    value = np.array([1.0, *(max(g.power, 0.0) / half**2 for g in found)])
    doubt = np.array([0.0, *(g.doubt / half**2 for g in found)])
    if frequency > f[-1] * (1 + 1e-9):
        return 0.0, 0.0
    curve = interpolate.PchipInterpolator(f, np.sqrt(value))
    return float(curve(min(frequency, float(f[-1])))) ** 2, float(np.interp(frequency, f, doubt))


def _level(f: Floats, mtf: Floats, u: Floats, level: float) -> Quantity | NotMeasured:
    """Return where the MTF falls to a level, on a monotone cubic through (0, 1) and the groups."""
    x, y = np.array([0.0, *f]), np.array([1.0, *mtf])
    below = np.flatnonzero(y < level)
    if not len(below):
        return NotMeasured(
            f"the MTF of the finest group that stands out is {y[-1]:.2g}: it does not fall to"
            f" {100 * level:g} %",
            "measure finer bars",
        )
    i = int(below[0])
    fine = np.linspace(x[i - 1], x[i], 201)
    curve = interpolate.PchipInterpolator(x, y)(fine)
    at = float(np.interp(-level, -curve, fine))
    slope = float(y[i - 1] - y[i]) / float(x[i] - x[i - 1])
    doubt = float(np.interp(at, x, np.array([0.0, *u])))
    return Quantity(at, "mm⁻¹", doubt / slope)


def _unresolved(found: list[Group]) -> list[Caution]:
    hidden = [g for g in found if g.power <= LEAST_POWER * g.doubt]
    if not hidden:
        return []
    names = ", ".join(f"{g.frequency:g}" for g in hidden)
    return [
        Caution(
            "noise-floor",
            f"The groups of {names} bar pairs a mm do not stand out of the noise.",
            "Average more slices to tell whether they are resolved.",
        )
    ]
