"""Circles among the edge points of a slice."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.edge_points import EdgePoints

    Floats = NDArray[np.float64]
    Flags = NDArray[np.bool_]
    Whole = NDArray[np.intp]

__all__ = ["Round", "round_objects"]

#: Sectors in which a circle is looked for, and the share of them that makes one.
SECTORS, WHOLE, PART = 36, 0.7, 0.4

#: A point belongs to a circle within so many pixels or this share of the radius, and so many
#: degrees between its normal and the radius.
NEAR_PX, NEAR_SHARE, LIKE_DEG = 1.0, 0.05, 25.0

#: Chains looked at, at most, the longest first.
MOST_CHAINS = 120


@dataclass(frozen=True, slots=True, eq=False)
class Round:
    """A circle, or a part of one.

    Attributes
    ----------
    center : (float, float)
        y and x, mm from the centre of pixel (0, 0).
    radius : float
        mm.
    seen : float
        Share of its circumference that is seen.
    points : ndarray of bool, shape (n,)
        The points that lie on it.
    """

    center: tuple[float, float]
    radius: float
    seen: float
    points: Flags

    @property
    def whole(self) -> bool:
        """True if enough of the circle is seen."""
        return self.seen >= WHOLE

    def same_as(self, other: Round) -> bool:
        """Tell whether another circle is this one found again."""
        apart = math.dist(self.center, other.center) + abs(self.radius - other.radius)
        return apart < 0.2 * max(self.radius, other.radius)

    def outside(self, y: Floats, x: Floats) -> Floats:
        """Return how far places lie outside the circle, mm."""
        found: Floats = np.hypot(y - self.center[0], x - self.center[1]) - self.radius
        return found


def round_objects(points: EdgePoints, pixel_mm: float, *, least_px: float = 3.0) -> list[Round]:
    """Return the circles of at least so many pixels of radius, the best seen first.

    A circle is fitted to every chain of points, algebraically (Kåsa 1976, IEEE Trans. IM 25:8),
    leaving out what does not follow it, and then gathers the points of other chains.
    """
    if len(points) == 0:
        return []
    chain = points.chains()
    order = np.argsort(chain, kind="stable")
    groups = np.split(order, np.flatnonzero(np.diff(chain[order])) + 1)
    groups = [group for group in groups if len(group) >= 4 * least_px]
    groups.sort(key=lambda group: -len(group))
    found: list[Round] = []
    for group in groups[:MOST_CHAINS]:
        one = _circle(points, group, pixel_mm)
        if one is not None and one.radius >= least_px * pixel_mm:
            found.append(one)
    found.sort(key=lambda one: -one.seen)
    kept: list[Round] = []
    for one in found:
        if not any(one.same_as(other) for other in kept):
            kept.append(one)
    return kept


def _circle(points: EdgePoints, group: Whole, pixel: float) -> Round | None:
    y, x = points.y[group], points.x[group]
    kept = np.ones(len(group), dtype=bool)
    for _ in range(4):
        fit = _fitted(y[kept], x[kept])
        if fit is None:
            return None
        cy, cx, radius = fit
        off = np.abs(np.hypot(y - cy, x - cx) - radius)
        near = max(NEAR_PX * pixel, NEAR_SHARE * radius)
        kept = off <= max(near, 1.5 * float(np.median(off)))
        if np.count_nonzero(kept) < max(8, 0.6 * len(group)):
            return None
    own = np.zeros(len(points), dtype=bool)
    own[group] = True
    down, right = points.y - cy, points.x - cx
    off = np.hypot(down, right) - radius
    azimuth = np.arctan2(down, right)
    outwards = np.cos(points.normal - azimuth)
    sign = 1.0 if float(outwards[own].mean()) > 0 else -1.0
    like = sign * outwards >= math.cos(math.radians(LIKE_DEG))
    member = (np.abs(off) <= max(NEAR_PX * pixel, NEAR_SHARE * radius)) & like
    if np.count_nonzero(member & own) < 0.6 * len(group):
        return None
    sectors = np.unique(np.floor((azimuth[member] / (2 * math.pi) + 0.5) * SECTORS))
    seen = min(1.0, len(sectors) / SECTORS)
    # a small circle has fewer points than sectors
    seen = max(seen, min(1.0, np.count_nonzero(member) / (2 * math.pi * radius / pixel)))
    return None if seen < PART else Round((cy, cx), radius, seen, member)


def _fitted(y: Floats, x: Floats) -> tuple[float, float, float] | None:
    """Return the centre and radius of the circle through points."""
    if len(y) < 6:
        return None
    middle_y, middle_x = float(y.mean()), float(x.mean())
    v, u = y - middle_y, x - middle_x
    columns = np.stack([2 * v, 2 * u, np.ones_like(v)], axis=1)
    mix, _, rank, _ = np.linalg.lstsq(columns, v * v + u * u, rcond=None)
    square = float(mix[2] + mix[0] ** 2 + mix[1] ** 2)
    if rank < 3 or not 0 < square < math.inf:
        return None
    return float(mix[0]) + middle_y, float(mix[1]) + middle_x, math.sqrt(square)
