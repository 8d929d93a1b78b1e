"""Plane figures with exact line integrals: the cuts of a phantom's objects.

A ray is the line ``x cos θ + y sin θ = t`` in mm, x to the right and y down the image. Each
figure answers :meth:`Section.strip_mean`: its chord length averaged over a strip of parallel rays
of a given width centred on the ray, in closed form (width 0 gives the chord itself). Nothing is
rasterised and nothing is marched.

Angles of figures are degrees counter-clockwise as seen on the screen, from +x.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Protocol, TypeAlias

import numpy as np
from scipy.special import erf

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.regions import direction

if TYPE_CHECKING:
    from numpy.typing import NDArray

    FloatArray = NDArray[np.float64]

__all__ = ["Blob", "Ellipse", "Polygon", "Section", "box"]

#: y, x in mm.
Point: TypeAlias = tuple[float, float]


class Section(Protocol):
    """What the projector asks of a plane figure."""

    @property
    def centre_mm(self) -> Point:
        """The y, x of the centre."""

    @property
    def reach_mm(self) -> float:
        """Radius about the centre beyond which every ray's integral is 0."""

    def moved(self, dy: float, dx: float) -> Section:
        """Return the figure shifted by dy, dx in mm."""

    def strip_mean(
        self, cos: FloatArray, sin: FloatArray, t: FloatArray, width: float
    ) -> FloatArray:
        """Return the mean chord in mm over a strip of rays."""

    def covers(self, y: FloatArray, x: FloatArray) -> NDArray[np.bool_]:
        """Return which points lie inside."""


@dataclass(frozen=True, slots=True)
class Ellipse:
    """An ellipse; a disc if both semi-axes are equal.

    Parameters
    ----------
    centre_mm : (float, float)
        y, x.
    semi_axes_mm : (float, float)
        Along the direction `angle_deg` and across it, each greater than 0.
    angle_deg : float
        Counter-clockwise on the screen from +x.

    Notes
    -----
    With a² = A² cos²(θ−φ) + B² sin²(θ−φ) and s the ray's distance from the centre, the chord is
    2 A B √(a²−s²) / a² (A. C. Kak and M. Slaney, Principles of Computerized Tomographic Imaging,
    1988, ch. 3; re-derived). The strip mean is the difference of its antiderivative
    A B [s √(a²−s²) + a² arcsin(s/a)] / a² at both edges of the strip, over the width.

    Examples
    --------
    >>> disc = Ellipse((0.0, 0.0), (5.0, 5.0))
    >>> one = np.ones(1)
    >>> float(disc.strip_mean(one, 0 * one, 3.0 * one, 0.0)[0])
    8.0
    """

    centre_mm: Point
    semi_axes_mm: tuple[float, float]
    angle_deg: float = 0.0

    def __post_init__(self) -> None:
        if not all(0 < axis < math.inf for axis in self.semi_axes_mm):
            raise ArgumentError("semi_axes_mm", "must each be greater than 0", self.semi_axes_mm)

    @property
    def reach_mm(self) -> float:
        """The longer semi-axis."""
        return max(self.semi_axes_mm)

    def moved(self, dy: float, dx: float) -> Ellipse:
        """Return the figure shifted by dy, dx in mm."""
        return replace(self, centre_mm=(self.centre_mm[0] + dy, self.centre_mm[1] + dx))

    def strip_mean(
        self, cos: FloatArray, sin: FloatArray, t: FloatArray, width: float
    ) -> FloatArray:
        """Return the mean chord in mm over a strip of rays."""
        long, short = self.semi_axes_mm
        uy, ux = direction(self.angle_deg)
        along = cos * ux + sin * uy
        half2 = long**2 * along**2 + short**2 * (1.0 - along**2)
        s = t - (self.centre_mm[1] * cos + self.centre_mm[0] * sin)
        scale = long * short / half2
        if width == 0:
            chord: FloatArray = 2.0 * scale * np.sqrt(np.maximum(half2 - s**2, 0.0))
            return chord
        half = np.sqrt(half2)

        def area(u: FloatArray) -> FloatArray:
            u = np.clip(u / half, -1.0, 1.0)
            part: FloatArray = u * np.sqrt(1.0 - u**2) + np.arcsin(u)
            return part

        mean: FloatArray = scale * half2 * (area(s + 0.5 * width) - area(s - 0.5 * width)) / width
        return mean

    def covers(self, y: FloatArray, x: FloatArray) -> NDArray[np.bool_]:
        """Return which points lie inside."""
        uy, ux = direction(self.angle_deg)
        dy, dx = y - self.centre_mm[0], x - self.centre_mm[1]
        along, across = dx * ux + dy * uy, dx * uy - dy * ux
        inside: NDArray[np.bool_] = (along / self.semi_axes_mm[0]) ** 2 + (
            across / self.semi_axes_mm[1]
        ) ** 2 <= 1.0
        return inside


@dataclass(frozen=True, slots=True)
class Polygon:
    """A simple polygon, convex or not.

    Parameters
    ----------
    corners_mm : tuple of (float, float)
        y, x of at least three corners, in order round the outline, either way.

    Notes
    -----
    By Green's theorem the area of the polygon on one side of a ray is the sum over the edges of
    the trapezia ∫ u ds up to the ray, with s across the rays and u along them; the strip mean is
    the area between the strip's edges over its width. Exact for any simple polygon.

    Examples
    --------
    >>> square = Polygon(((0, 0), (0, 2), (2, 2), (2, 0)))
    >>> one = np.ones(1)
    >>> square.strip_mean(one, 0 * one, 1.0 * one, 0.5).round(12).tolist()
    [2.0]
    """

    corners_mm: tuple[Point, ...]

    def __post_init__(self) -> None:
        if len(self.corners_mm) < 3 or abs(self._signed_area()) <= 0:
            raise ArgumentError(
                "corners_mm", "must hold at least 3 corners around an area", self.corners_mm
            )

    def _signed_area(self) -> float:
        y, x = np.asarray(self.corners_mm, dtype=float).T
        return 0.5 * float(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y))

    @property
    def centre_mm(self) -> Point:
        """Mean of the corners."""
        y, x = np.mean(np.asarray(self.corners_mm, dtype=float), axis=0)
        return float(y), float(x)

    @property
    def reach_mm(self) -> float:
        """Distance of the farthest corner from the centre."""
        corners = np.asarray(self.corners_mm, dtype=float) - self.centre_mm
        return float(np.max(np.hypot(*corners.T)))

    def moved(self, dy: float, dx: float) -> Polygon:
        """Return the figure shifted by dy, dx in mm."""
        return Polygon(tuple((y + dy, x + dx) for y, x in self.corners_mm))

    def strip_mean(
        self, cos: FloatArray, sin: FloatArray, t: FloatArray, width: float
    ) -> FloatArray:
        """Return the mean chord in mm over a strip of rays."""
        width = width if width > 0 else 1e-5  # a chord changes by less than 1e-4 mm within it
        cy, cx = self.centre_mm
        local = t - (cx * cos + cy * sin)
        total = np.zeros(np.broadcast(cos, local).shape)
        corners = [(y - cy, x - cx) for y, x in self.corners_mm]
        for first, second in zip(corners, corners[1:] + corners[:1], strict=True):
            s0, s1 = (x * cos + y * sin for y, x in (first, second))
            u0, u1 = (y * cos - x * sin for y, x in (first, second))
            total += _edge_area(s0, u0, s1, u1, local - 0.5 * width, local + 0.5 * width)
        sign = -math.copysign(1.0, self._signed_area())
        mean: FloatArray = sign * total / width
        return mean

    def covers(self, y: FloatArray, x: FloatArray) -> NDArray[np.bool_]:
        """Return which points lie inside (even-odd rule)."""
        inside = np.zeros(np.broadcast(y, x).shape, dtype=bool)
        corners = self.corners_mm
        for (y0, x0), (y1, x1) in zip(corners, corners[1:] + corners[:1], strict=True):
            if y0 == y1:
                continue
            between = (y0 > y) != (y1 > y)
            inside ^= between & (x < x0 + (y - y0) * (x1 - x0) / (y1 - y0))
        return inside


def _edge_area(
    s0: FloatArray,
    u0: FloatArray,
    s1: FloatArray,
    u1: FloatArray,
    low: FloatArray,
    high: FloatArray,
) -> FloatArray:
    """Return ∫ u ds along an edge from (s0, u0) to (s1, u1), for s between low and high."""
    run = s1 - s0
    level = np.abs(run) < 1e-12  # the edge lies along the ray: nothing is swept
    slope = np.where(level, 0.0, (u1 - u0) / np.where(level, 1.0, run))
    start = np.minimum(np.maximum(s0, low), high)
    end = np.minimum(np.maximum(s1, low), high)
    swept: FloatArray = (end - start) * (u0 + slope * (0.5 * (start + end) - s0))
    return swept


@dataclass(frozen=True, slots=True)
class Blob:
    """A Gaussian mound of material: exp(−r²/2s²) of the full density at distance r.

    Parameters
    ----------
    centre_mm : (float, float)
        y, x.
    sigma_mm : float
        s, greater than 0.

    Notes
    -----
    The line integral at distance t is s √(2π) exp(−t²/2s²); its strip mean is a difference of
    error functions. Beyond 9 s, where it is below 1e-17 of its peak, it counts as 0.
    """

    centre_mm: Point
    sigma_mm: float

    def __post_init__(self) -> None:
        if not 0 < self.sigma_mm < math.inf:
            raise ArgumentError("sigma_mm", "must be greater than 0", self.sigma_mm)

    @property
    def reach_mm(self) -> float:
        """Nine sigma."""
        return 9.0 * self.sigma_mm

    def moved(self, dy: float, dx: float) -> Blob:
        """Return the figure shifted by dy, dx in mm."""
        return replace(self, centre_mm=(self.centre_mm[0] + dy, self.centre_mm[1] + dx))

    def strip_mean(
        self, cos: FloatArray, sin: FloatArray, t: FloatArray, width: float
    ) -> FloatArray:
        """Return the mean line integral in mm over a strip of rays."""
        s = t - (self.centre_mm[1] * cos + self.centre_mm[0] * sin)
        sigma = self.sigma_mm
        if width == 0:
            line: FloatArray = sigma * math.sqrt(2 * math.pi) * np.exp(-0.5 * (s / sigma) ** 2)
            return line
        scale = sigma * math.sqrt(2.0)
        step = erf((s + 0.5 * width) / scale) - erf((s - 0.5 * width) / scale)
        mean: FloatArray = math.pi * sigma**2 * step / width
        return mean

    def covers(self, y: FloatArray, x: FloatArray) -> NDArray[np.bool_]:
        """Return which points lie within the reach."""
        inside: NDArray[np.bool_] = (
            np.hypot(y - self.centre_mm[0], x - self.centre_mm[1]) <= self.reach_mm
        )
        return inside


def box(centre_mm: Point, size_mm: tuple[float, float], angle_deg: float = 0.0) -> Polygon:
    """Return a rectangle.

    Parameters
    ----------
    centre_mm : (float, float)
        y, x.
    size_mm : (float, float)
        Length along the direction `angle_deg` and width across it.
    angle_deg : float
        Counter-clockwise on the screen from +x.

    >>> box((0.0, 0.0), (4.0, 2.0)).reach_mm == math.hypot(2.0, 1.0)
    True
    """
    if not all(0 < side < math.inf for side in size_mm):
        raise ArgumentError("size_mm", "must each be greater than 0", size_mm)
    uy, ux = direction(angle_deg)
    cy, cx = centre_mm
    half, wide = 0.5 * size_mm[0], 0.5 * size_mm[1]
    signs = ((-1, -1), (1, -1), (1, 1), (-1, 1))
    return Polygon(
        tuple(
            (cy + a * half * uy + b * wide * ux, cx + a * half * ux - b * wide * uy)
            for a, b in signs
        )
    )
