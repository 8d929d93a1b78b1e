"""Straight pieces among the edge points of a slice."""

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

__all__ = ["Straight", "straight_pieces"]

#: Normals are told apart by sectors of so many degrees, in two sets shifted by half a sector.
SECTOR_DEG = 22.5

#: A point belongs to a line within so many pixels and degrees, and behind a gap of so many pixels.
NEAR_PX, LIKE_DEG, GAP_PX = 1.2, 20.0, 6.0

#: Pixels that are left off at either end, where corners are rounded.
CORNER_PX = 3.0

#: Pieces looked at, at most, the longest first.
MOST_PIECES = 80


@dataclass(frozen=True, slots=True, eq=False)
class Straight:
    """A straight piece of an edge.

    Attributes
    ----------
    middle : (float, float)
        y and x of its middle, mm from the centre of pixel (0, 0).
    normal : float
        Direction in which the values rise, radians from +x towards +y (down the image).
    length : float
        mm.
    bend, bend_doubt : float
        Height of the arc that it makes, and its standard uncertainty, mm.
    points : ndarray of bool, shape (n,)
        The points that lie on it.
    """

    middle: tuple[float, float]
    normal: float
    length: float
    bend: float
    bend_doubt: float
    points: Flags

    @property
    def lean(self) -> float:
        """Degrees between the edge and the nearer pixel axis."""
        turned = math.degrees(self.normal) % 90.0
        return min(turned, 90.0 - turned)

    def distance(self, y: Floats, x: Floats) -> Floats:
        """Return the signed distance of places from the line, mm."""
        found: Floats = (x - self.middle[1]) * math.cos(self.normal)
        return found + (y - self.middle[0]) * math.sin(self.normal)


def straight_pieces(
    points: EdgePoints, pixel_mm: float, *, least_px: float = 14.0
) -> list[Straight]:
    """Return the straight pieces of at least so many pixels, the longest first.

    Neighbours whose normals lie in one sector make a seed (line-support regions: Burns, Hanson and
    Riseman 1986, IEEE Trans. PAMI 8:425); the line through it gathers the points that continue it.
    """
    if len(points) == 0:
        return []
    found: list[Straight] = []
    taken = np.zeros(len(points), dtype=bool)
    for seed in _seeds(points, least_px):
        if np.count_nonzero(taken[seed]) > 0.5 * len(seed):
            continue
        piece = _grown(points, seed, pixel_mm)
        if piece is None or piece.length < least_px * pixel_mm:
            continue
        if np.count_nonzero(taken & piece.points) > 0.5 * np.count_nonzero(piece.points):
            continue
        taken |= piece.points
        found.append(piece)
    found.sort(key=lambda one: -one.length)
    return found


def _seeds(points: EdgePoints, least_px: float) -> list[Whole]:
    width = math.radians(SECTOR_DEG)
    found: list[Whole] = []
    first, second = points.pairs
    for shift in (0.0, 0.5):
        sector = np.floor((points.normal % (2 * math.pi)) / width + shift)
        sector %= round(2 * math.pi / width)
        chain = points.chains(sector[first] == sector[second])
        order = np.argsort(chain, kind="stable")
        groups = np.split(order, np.flatnonzero(np.diff(chain[order])) + 1)
        found += [group for group in groups if len(group) >= 0.6 * least_px]
    found.sort(key=lambda group: -len(group))
    return found[:MOST_PIECES]


def _grown(points: EdgePoints, seed: Whole, pixel: float) -> Straight | None:
    """Return the line through a seed with all points that continue it."""
    member = np.zeros(len(points), dtype=bool)
    member[seed] = True
    near, ends = member, (0.0, 0.0)
    for _ in range(3):
        middle, normal = _line(points, member)
        t, d = _along(points, middle, normal)
        turn = np.abs((points.normal - normal + math.pi) % (2 * math.pi) - math.pi)
        near = (np.abs(d) <= NEAR_PX * pixel) & (turn <= math.radians(LIKE_DEG))
        run = _run(np.sort(t[near]), GAP_PX * pixel)
        if run is None:
            return None
        ends = run
        inner = CORNER_PX * pixel
        member = near & (t >= ends[0] + inner) & (t <= ends[1] - inner)
        if np.count_nonzero(member) < 6:
            return None
    middle, normal = _line(points, member)
    t, d = _along(points, middle, normal)
    low, high = float(t[member].min()), float(t[member].max())
    shift = (low + high) / 2
    middle = middle[0] + shift * math.cos(normal), middle[1] - shift * math.sin(normal)
    columns = np.stack([np.ones_like(t), t - shift, (t - shift) ** 2])[:, member]
    inverse = np.linalg.pinv(columns @ columns.T)
    mix = inverse @ (columns @ d[member])
    noise = float(np.mean((d[member] - mix @ columns) ** 2))
    half = ((high - low) / 2) ** 2
    return Straight(
        middle,
        normal,
        high - low,
        abs(float(mix[2])) * half,
        math.sqrt(noise * max(float(inverse[2, 2]), 0.0)) * half,
        near & (t >= ends[0]) & (t <= ends[1]),
    )


def _line(points: EdgePoints, member: Flags) -> tuple[tuple[float, float], float]:
    """Return middle and normal of the line through points, least squares across it."""
    y, x = points.y[member], points.x[member]
    middle = float(y.mean()), float(x.mean())
    spread = np.cov(np.stack([x, y]))
    across = np.linalg.eigh(spread)[1][:, 0]
    mean = np.array([np.cos(points.normal[member]).mean(), np.sin(points.normal[member]).mean()])
    if float(across @ mean) < 0:
        across = -across
    return middle, math.atan2(float(across[1]), float(across[0]))


def _along(points: EdgePoints, middle: tuple[float, float], normal: float) -> tuple[Floats, Floats]:
    down, right = points.y - middle[0], points.x - middle[1]
    t: Floats = down * math.cos(normal) - right * math.sin(normal)
    d: Floats = right * math.cos(normal) + down * math.sin(normal)
    return t, d


def _run(t: Floats, gap: float) -> tuple[float, float] | None:
    """Return the ends of the run of sorted places without a gap that holds 0 or lies nearest."""
    if len(t) < 6:
        return None
    breaks = np.flatnonzero(np.diff(t) > gap)
    lows, highs = t[np.r_[0, breaks + 1]], t[np.r_[breaks, len(t) - 1]]
    away = np.maximum(np.maximum(lows, -highs), 0.0)
    best = int(np.argmin(away))
    return float(lows[best]), float(highs[best])
