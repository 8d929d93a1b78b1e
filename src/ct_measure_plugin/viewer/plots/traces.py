"""What a plot draws: curves with a label and a look, ticks along the axis, and their words."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.results import Quantity, label_of

if TYPE_CHECKING:
    from collections.abc import Iterable

    from ct_measure_plugin.physics.results import Curve

__all__ = ["Tick", "Trace", "axis_text", "end_of", "reading", "ticks_of"]

#: Unit of spatial frequencies. A quantity in it is a place on a frequency axis, whereas one in mm
#: may be a width, which is none.
FREQUENCY = "mm⁻¹"

#: Units of axes on which quantities of the same unit are places.
PLACES = (FREQUENCY, "keV")

#: How far beyond the Nyquist frequency an axis is shown.
_BEYOND = 1.4


@dataclass(frozen=True, slots=True, eq=False)
class Trace:
    """One curve in a plot.

    Attributes
    ----------
    label : str
        For the legend.
    curve : Curve
        What to draw.
    colour : int
        Which of the theme's line colours.
    frozen : bool
        True for one kept from before: dashed.
    band : bool
        Whether to draw its uncertainty, ± one standard uncertainty.
    """

    label: str
    curve: Curve
    colour: int = 0
    frozen: bool = False
    band: bool = True


@dataclass(frozen=True, slots=True)
class Tick:
    """A marked place on the horizontal axis."""

    label: str
    x: float


def ticks_of(curve: Curve, quantities: Iterable[tuple[str, object]]) -> tuple[Tick, ...]:
    """Return the quantities that are places on a curve's axis: frequencies, or energies."""
    if curve.x_unit not in PLACES or not len(curve.x):
        return ()
    return tuple(
        Tick(label_of(name), found.value)
        for name, found in quantities
        if isinstance(found, Quantity)
        and found.unit == curve.x_unit
        and curve.x[0] <= found.value <= curve.x[-1]
    )


def end_of(curve: Curve, nyquist: object) -> float | None:
    """Return how far a frequency axis is worth showing: somewhat beyond the pixels' Nyquist.

    None where the curve ends before, or where there is no such frequency.
    """
    if not isinstance(nyquist, Quantity) or curve.x_unit != FREQUENCY or not len(curve.x):
        return None
    end = math.ceil(2 * _BEYOND * nyquist.value) / 2
    return end if end < float(curve.x[-1]) else None


def axis_text(name: str, unit: str) -> str:
    """Return an axis's words.

    >>> axis_text("distance", "mm"), axis_text("MTF", "")
    ('distance (mm)', 'MTF')
    """
    return f"{name} ({unit})" if unit else name


def reading(curve: Curve, x: float) -> tuple[int, str]:
    """Return the sample nearest to a place, and what it says in words.

    The curve must have samples. Of a fitted one, what it was fitted to is told.
    """
    curve = curve.data or curve
    index = int(np.argmin(np.abs(np.asarray(curve.x) - x)))
    doubt = None if curve.y_uncertainty is None else float(curve.y_uncertainty[index])
    if doubt is not None and not np.isfinite(doubt):
        doubt = None
    at = f"{curve.x[index]:.4g} {curve.x_unit}".strip()
    value = float(curve.y[index])
    said = str(Quantity(value, curve.y_unit, doubt)) if np.isfinite(value) else "no value"
    return index, f"{at}: {said}"
