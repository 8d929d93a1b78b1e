"""Means over discs and cells of a cylinder, slice by slice, and how far equal ones scatter."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cache
from typing import TYPE_CHECKING

import numpy as np
from scipy import sparse, stats

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.coverage import plane_coverage
from ct_measure_plugin.physics.regions import Disc

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.cylinder import Cylinder

    Floats = NDArray[np.float64]
    Whole = NDArray[np.intp]

__all__ = [
    "WATER",
    "Cells",
    "DiscMeans",
    "Places",
    "disc_means",
    "disc_weights",
    "scatter",
    "student",
]


#: Share of the radius that the water region reaches: 40 % of the diameter.
WATER = 0.4

#: Fewer discs on the ring do not tell how far equal ones scatter.
FEWEST_DISCS = 8


@dataclass(frozen=True, slots=True, kw_only=True)
class Places:
    """Where to look in a cylinder; lengths in units of its radius.

    Attributes
    ----------
    edge_regions : int
        Number of edge regions, evenly spread.
    edge_position, edge_size : float
        Distance of their centres from the axis, and their radius.
    first_deg : float
        Azimuth of the first one, counter-clockwise on the screen from +x.
    centre_size : float
        Radius of the centre region.
    field : float
        How far profile, fit and map reach.
    """

    edge_regions: int = 4
    edge_position: float = 0.8
    edge_size: float = 0.1
    first_deg: float = 0.0
    centre_size: float = 0.1
    field: float = 0.9

    def __post_init__(self) -> None:
        if not 0.5 <= self.field <= 0.98:
            raise ArgumentError("field", "must be from 0.5 to 0.98", self.field)
        if not 0.02 <= self.centre_size <= 0.25:
            raise ArgumentError("centre_size", "must be from 0.02 to 0.25", self.centre_size)
        if not 2 <= self.edge_regions <= 24:
            raise ArgumentError("edge_regions", "must be from 2 to 24", self.edge_regions)
        if not 0.02 <= self.edge_size <= 0.25:
            raise ArgumentError("edge_size", "must be from 0.02 to 0.25", self.edge_size)
        if not 2 * self.edge_size <= self.edge_position <= 0.98 - self.edge_size:
            raise ArgumentError(
                "edge_position",
                "must leave the regions off the axis and within the edge",
                self.edge_position,
            )
        if len(self.ring()) < FEWEST_DISCS:
            raise ArgumentError(
                "edge_size",
                f"must leave room for {FEWEST_DISCS} regions on the ring",
                self.edge_size,
            )

    @property
    def reach(self) -> float:
        """How far from the axis anything is looked at."""
        return max(self.field, self.edge_position + self.edge_size)

    def ring(self) -> Floats:
        """Return centres (y, x) of equal discs around the edge regions' ring, shape (n, 2).

        As many as fit without overlap, a multiple of the edge regions, which are among them.
        """
        angle = np.radians(self.first_deg) + 2 * np.pi * np.arange(self._count) / self._count
        return self.edge_position * np.stack([-np.sin(angle), np.cos(angle)], axis=1)

    def chosen(self) -> Whole:
        """Return which discs of the ring are the edge regions."""
        step = self._count // self.edge_regions
        return np.arange(self.edge_regions, dtype=np.intp) * step

    def middle(self) -> Floats:
        """Return centres (y, x) of equal discs about the axis, the centre region first."""
        return _packed(self.centre_size, self.field)

    @property
    def _count(self) -> int:
        fit = math.pi / math.asin(self.edge_size / self.edge_position) * (1 + 1e-9)
        return max(int(fit // self.edge_regions), 1) * self.edge_regions


def _packed(size: float, field: float) -> Floats:
    """Return centres of discs on a square lattice, the middle first, then outwards.

    As far as 0.6 of the radius, where noise is still much as in the middle; further if that
    leaves fewer than 12.
    """
    steps = np.arange(-40, 41)
    y, x = (2.0 * size * grid.ravel() for grid in np.meshgrid(steps, steps, indexing="ij"))
    distance = np.hypot(y, x)
    order = np.argsort(distance, kind="stable")
    y, x, reach = y[order], x[order], distance[order] + size
    near = reach <= 0.6 + 1e-9
    if near.sum() < 12:
        near = reach <= field + 1e-9
    return np.stack([y[near], x[near]], axis=1)


def disc_weights(
    places: Floats,
    size: float,
    center_mm: Floats,
    radius_mm: float,
    shape: tuple[int, int],
    spacing_mm: tuple[float, float],
) -> sparse.csr_array:
    """Return weights that turn an image into the means of discs, shape (discs, pixels).

    Each pixel counts by the exact share of its area inside the disc.
    """
    rows, columns, values = [], [], []
    index = np.arange(shape[0] * shape[1]).reshape(shape)
    for k, (y, x) in enumerate(places):
        disc = Disc(
            (float(center_mm[0] + y * radius_mm), float(center_mm[1] + x * radius_mm)),
            size * radius_mm,
        )
        cover = plane_coverage(disc, shape, spacing_mm=spacing_mm)
        pixel = index[cover.rows, cover.columns]
        used = cover.weights > 0
        columns.append(pixel[used])
        values.append(cover.weights[used] / cover.weights.sum())
        rows.append(np.full(int(used.sum()), k))
    where = (np.concatenate(rows), np.concatenate(columns))
    return sparse.csr_array(
        (np.concatenate(values), where), shape=(len(places), shape[0] * shape[1])
    )


@dataclass(frozen=True, slots=True, eq=False)
class DiscMeans:
    """Means of the discs, slice by slice, and what equal ones scatter by.

    Attributes
    ----------
    edges : ndarray, shape (slices, regions)
        Of the edge regions.
    centre, water : ndarray, shape (slices,)
        Of the centre region and of the water region.
    edge_error, centre_error : ndarray, shape (slices + 1,)
        Standard uncertainty of one of them, slice by slice and, last, of its mean over slices.
    """

    edges: Floats
    centre: Floats
    water: Floats
    edge_error: Floats
    centre_error: Floats


def disc_means(
    planes: list[NDArray[np.generic]],
    found: Cylinder,
    places: Places,
    spacing_mm: tuple[float, float],
) -> DiscMeans:
    """Return the means of all discs on a cylinder."""
    ring, middle = places.ring(), places.middle()
    wanted = (
        (ring, places.edge_size),
        (middle, places.centre_size),
        (np.zeros((1, 2)), WATER),
    )
    rows: list[list[Floats]] = []
    weights: list[sparse.csr_array] = []
    for plane, center in zip(planes, found.centers_mm, strict=True):
        if not weights or found.moves:
            shape = (plane.shape[0], plane.shape[1])
            weights = [
                disc_weights(where, size, center, found.radius_mm, shape, spacing_mm)
                for where, size in wanted
            ]
        values = np.asarray(plane, dtype=float).ravel()
        rows.append([w @ values for w in weights])
    around, inner, water = (np.array(part) for part in zip(*rows, strict=True))
    angle = np.arctan2(-ring[:, 0], ring[:, 1])
    waves = np.stack([np.ones(len(ring)), np.cos(angle), np.sin(angle)], axis=1)
    y, x = middle.T
    bowl = np.stack([np.ones(len(middle)), x, y, x**2 + y**2], axis=1)
    edge_error, edge_free = scatter(_with_mean(around), waves)
    centre_error, centre_free = scatter(_with_mean(inner), bowl)
    return DiscMeans(
        around[:, places.chosen()],
        inner[:, 0],
        water[:, 0],
        edge_error * student(edge_free),
        centre_error * student(centre_free),
    )


def _with_mean(means: Floats) -> Floats:
    return np.concatenate([means, means.mean(axis=0, keepdims=True)])


def scatter(means: Floats, design: Floats) -> tuple[Floats, int]:
    """Return the standard deviation of equal regions' means about a smooth trend.

    Parameters
    ----------
    means : ndarray, shape (…, n)
        Of n regions.
    design : ndarray, shape (n, terms)
        The trend.

    Returns
    -------
    ndarray, shape (…), and the degrees of freedom.
    """
    q, _ = np.linalg.qr(design)
    rest = means - (means @ q) @ q.T
    freedom = means.shape[-1] - design.shape[1]
    return np.sqrt(np.sum(rest**2, axis=-1) / max(freedom, 1)), freedom


@cache
def student(freedom: int) -> float:
    """Return what an uncertainty of few degrees of freedom is widened by.

    t / 1.96 at 95 % (JCGM 100:2008, G.3), so that ±1.96 of it hold the truth as often.

    >>> round(student(4), 2), round(student(100), 2)
    (1.42, 1.01)
    """
    return float(stats.t.isf(0.025, max(freedom, 1)) / stats.norm.isf(0.025))


class Cells:
    """Cells of equal area that fill the field: a middle one, then rings of 8, 16, 24 and so on.

    Parameters
    ----------
    rings : int
        Number of rings about the middle cell.
    field : float
        Their outer radius, in units of the cylinder's.
    """

    def __init__(self, rings: int, field: float) -> None:
        self.rings, self.field = rings, field
        self.count = 1 + 4 * rings * (rings + 1)
        self.width = field / (rings + 0.5)

    def labels(self, r: Floats, angle: Floats) -> Whole:
        """Return the cell of each point given by distance and angle; all must lie in the field."""
        ring = np.minimum(np.rint(r / self.width).astype(np.intp), self.rings)
        turn = np.mod(angle / (2.0 * np.pi), 1.0)
        sector = np.minimum((turn * 8 * ring).astype(np.intp), np.maximum(8 * ring - 1, 0))
        found: Whole = np.where(ring == 0, 0, 1 + 4 * ring * (ring - 1) + sector)
        return found

    def within(self, r: float) -> NDArray[np.bool_]:
        """Tell which cells lie wholly within a distance; the middle one and a ring at least."""
        rings = max(1, int(r / self.width - 0.5))
        found: NDArray[np.bool_] = np.arange(self.count) < 1 + 4 * rings * (rings + 1)
        return found
