"""A cylinder in a stack of slices: its circle in each, its axis and tilt."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.cylinder_circle import Circle, find_circle
from ct_measure_plugin.physics.results import NotMeasured, Quantity

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["Cylinder", "find_cylinder", "given_cylinder"]

#: A slice whose radius differs from the median by more than this share shows an end, not the body.
RADIUS_SPREAD = 0.01

#: How far the half level of a scanned edge may lie from the object's edge, in pixels: an edge of
#: simulated scans lies 0.02 px too far out, with a beam-hardening cup 0.05 px, blurred discs on a
#: grid 0.01 px to either side (tests/physics/test_cylinder.py). The true place is taken as evenly
#: likely within.
EDGE_PIXELS = 0.05

#: At least this share of the slices must show the body.
FEWEST_SHARE = 0.5


@dataclass(frozen=True, slots=True, eq=False)
class Cylinder:
    """Circles on a straight axis.

    Attributes
    ----------
    slices : tuple of int
        Indices of the slices that show the body.
    z_mm : ndarray, shape (k,)
        Their positions.
    centers_mm : ndarray, shape (k, 2)
        y and x of the axis in each, from the centre of pixel (0, 0).
    radius_mm : float
        Mean radius.
    radius : Quantity
        The same, with its uncertainty: of the scatter of the rays, and of what an edge is.
    center_doubt_mm : float
        Standard uncertainty of each coordinate of the axis: that of one slice's circle.
    tilt : Quantity or None
        Angle of the axis to the slices' normal, degrees; None from a single slice.
    ellipticity : Quantity or None
        Longest minus shortest radius, percent of the radius; None if the circle was given.
    rim : float or None
        Level just inside the edge, over the outer 3 % of the radius; None if the circle was given.
    left_out : tuple of int
        Slices that do not show the body.
    moves : bool
        True if the axis leaves its middle by more than a tenth of a pixel and three of its own
        uncertainties; else every slice has the same centre.
    """

    slices: tuple[int, ...]
    z_mm: Floats
    centers_mm: Floats
    radius_mm: float
    radius: Quantity
    center_doubt_mm: float
    tilt: Quantity | None
    ellipticity: Quantity | None
    rim: float | None
    left_out: tuple[int, ...]
    moves: bool


def given_cylinder(
    center_mm: tuple[float, float], radius_mm: float, z_mm: Sequence[float] | Floats
) -> Cylinder:
    """Return an upright cylinder that was placed by hand, on all slices."""
    z = np.asarray(z_mm, dtype=float)
    if not radius_mm > 0:
        raise ArgumentError("radius_mm", "must be greater than 0", radius_mm)
    return Cylinder(
        tuple(range(len(z))),
        z,
        np.tile(np.asarray(center_mm, dtype=float), (len(z), 1)),
        float(radius_mm),
        Quantity(float(radius_mm), "mm", 0.0),
        0.0,
        None,
        None,
        None,
        (),
        moves=False,
    )


def find_cylinder(
    planes: Sequence[NDArray[np.generic]] | NDArray[np.generic],
    *,
    spacing_mm: tuple[float, float],
    z_mm: Sequence[float] | Floats,
) -> Cylinder | NotMeasured:
    """Return the cylinder that the slices of a stack show.

    Parameters
    ----------
    planes : sequence of ndarray, each of shape (ny, nx)
        The slices.
    spacing_mm : (float, float)
        dy and dx.
    z_mm : sequence of float
        Position of each slice.

    Returns
    -------
    Cylinder or NotMeasured
        NotMeasured if fewer than half of the slices show a circle of one size.

    Notes
    -----
    The axis is the straight line through the circles' centres by least squares.

    Examples
    --------
    >>> y, x = np.mgrid[:64, :64]
    >>> planes = [1000 / (1 + np.exp(2 * (np.hypot(y - 31, x - 32 - k / 10) - 20)))
    ...           for k in range(5)]
    >>> found = find_cylinder(planes, spacing_mm=(1.0, 1.0), z_mm=range(5))
    >>> round(found.tilt.value, 1)  # 0.1 mm a slice of 1 mm
    5.7
    """
    z = np.asarray(z_mm, dtype=float)
    circles = [find_circle(np.asarray(plane), spacing_mm) for plane in planes]
    good = [(k, c) for k, c in enumerate(circles) if isinstance(c, Circle)]
    if not good:
        return next(c for c in circles if isinstance(c, NotMeasured))
    middle = float(np.median([c.radius_mm for _, c in good]))
    body = [(k, c) for k, c in good if abs(c.radius_mm / middle - 1) <= RADIUS_SPREAD]
    if len(body) < FEWEST_SHARE * len(circles):
        return NotMeasured(
            f"only {len(body)} of {len(circles)} slices show a circle of one size",
            "choose slices through the body of a cylinder",
        )
    slices = tuple(k for k, _ in body)
    return _on_an_axis(slices, [c for _, c in body], z, spacing_mm, len(circles))


def _on_an_axis(
    slices: tuple[int, ...],
    circles: list[Circle],
    z_mm: Floats,
    spacing_mm: tuple[float, float],
    total: int,
) -> Cylinder:
    z = z_mm[list(slices)]
    centers = np.array([c.center_mm for c in circles])
    doubts = np.array([c.doubt_mm for c in circles])
    own = math.sqrt(2.0 * float(np.mean(doubts**2)))
    slope, line, slope_doubt = _line(z, centers, own)
    tilt = None
    if len(z) > 1:
        steepness = float(np.hypot(*slope))
        angle = math.degrees(math.atan(steepness))
        tilt = Quantity(angle, "°", math.degrees(slope_doubt / (1 + steepness**2)))
    span = float(np.ptp(z)) / 2
    drift = span * float(np.hypot(*slope))
    moves = drift > 0.1 * min(spacing_mm) and drift > 3.0 * span * slope_doubt
    radii = np.array([c.radius_mm for c in circles])
    spread = float(radii.std(ddof=1)) / math.sqrt(len(radii)) if len(radii) > 1 else 0.0
    doubt = max(spread, math.sqrt(float(np.mean(doubts**2)) / len(doubts)))
    edge = EDGE_PIXELS * max(spacing_mm) / math.sqrt(3.0)
    shape = np.array([c.ellipticity for c in circles])
    # two amplitudes, each √(2/blocks) of the scatter: 2 √2 times the radius's own uncertainty
    shape_doubt = 200.0 * math.sqrt(2.0) * doubt / float(radii.mean())
    return Cylinder(
        slices,
        z,
        line if moves else np.tile(centers.mean(axis=0), (len(z), 1)),
        float(radii.mean()),
        Quantity(float(radii.mean()), "mm", math.hypot(doubt, edge)),
        own,
        tilt,
        Quantity(100.0 * float(shape.mean()), "%", shape_doubt),
        float(np.median([c.inside for c in circles])),
        tuple(k for k in range(total) if k not in slices),
        moves,
    )


def _line(z: Floats, centers: Floats, own: float) -> tuple[Floats, Floats, float]:
    """Return the axis's slope (y and x a mm of z), its points, and the slope's uncertainty.

    The circles' scatter about the line gives the uncertainty, their own the least of it.
    """
    middle, mean = z.mean(), centers.mean(axis=0)
    away = z - middle
    size = float(np.sum(away**2))
    if size == 0:
        return np.zeros(2), centers.copy(), 0.0
    slope = away @ (centers - mean) / size
    line = mean + away[:, None] * slope
    scatter = 0.0
    if len(z) > 2:
        scatter = math.sqrt(float(np.sum((centers - line) ** 2)) / (2 * (len(z) - 2)))
    return slope, line, max(scatter, own) / math.sqrt(size)
