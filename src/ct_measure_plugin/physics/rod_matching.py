"""Layouts laid on round objects: which turn and shift fits best, and which comes next."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.attenuation import ct_number, water_attenuation
from ct_measure_plugin.physics.rod_candidates import disc_means

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.physics.rod_candidates import Candidate
    from ct_measure_plugin.physics.rod_layout import LayoutRod

    Floats = NDArray[np.float64]

__all__ = ["Match", "Scene", "best_matches"]

#: The most that one disagreement counts (4 standard deviations): a rod may be missing or mixed up.
CAP = 16.0

#: Energies at which materials are compared with what is read, keV.
_ENERGIES_KEV = np.arange(45.0, 112.0, 5.0)

#: Standard deviation of a CT number beyond that of the density: noise, scatter, calibration, HU.
_READING_HU = 8.0

#: A rod that differs from its surroundings by less need not be seen, HU.
_FAINT_HU = 40.0

#: Placings that are looked at more closely.
_CLOSER = 40

#: Placings compared at a time.
_CHUNK = 2000


@dataclass(frozen=True, slots=True, eq=False)
class Scene:
    """Round objects on a slice, and the layout to be laid on them.

    Attributes
    ----------
    layout : sequence of LayoutRod
        What is looked for.
    centers : ndarray, shape (m, 2)
        The layout's y and x, mm.
    candidates : list of Candidate
        What is there.
    spots : ndarray, shape (n, 2)
        Their centres, mm.
    sized : ndarray of bool, shape (m, n)
        Whether a round object has a rod's diameter.
    means : dict of float to ndarray
        By radius, the mean of a rod's inside about every pixel.
    expected, tolerance : ndarray, shape (m, energies)
        CT numbers of the materials and their standard deviations; NaN where none is known.
    background : float
        The CT number around the rods.
    spacing : (float, float)
        dy, dx, mm.
    sigma : float
        Standard deviation of a rod's place in its phantom, mm.
    """

    layout: Sequence[LayoutRod]
    centers: Floats
    candidates: list[Candidate]
    spots: Floats
    sized: NDArray[np.bool_]
    means: dict[float, Floats]
    expected: Floats
    tolerance: Floats
    background: float
    spacing: tuple[float, float]
    sigma: float

    @classmethod
    def of(
        cls,
        image: Floats,
        spacing: tuple[float, float],
        candidates: list[Candidate],
        layout: Sequence[LayoutRod],
        sigma: float,
    ) -> Scene:
        """Return the scene of an image."""
        radii = np.array([0.5 * rod.diameter_mm for rod in layout])
        found = np.array([one.radius for one in candidates])
        means = {float(r): disc_means(image, float(r), spacing) for r in np.unique(radii)}
        expected, tolerance = _expected(layout)
        places = [
            (round(one.center[0] / spacing[0]), round(one.center[1] / spacing[1]))
            for one in candidates
        ]
        around = [
            image[place] - one.contrast for place, one in zip(places, candidates, strict=True)
        ]
        return cls(
            layout,
            np.array([rod.center_mm for rod in layout]),
            candidates,
            np.array([one.center for one in candidates]),
            np.abs(found[None] / radii[:, None] - 1) < 0.25,
            means,
            expected,
            tolerance,
            float(np.median(around)),
            spacing,
            sigma,
        )

    def mirrored(self) -> Scene:
        """Return the scene with the layout turned over."""
        return replace(self, centers=self.centers * [1.0, -1.0])

    @property
    def visible(self) -> NDArray[np.bool_]:
        """Which rods ought to stand out, shape (m,)."""
        middle = self.expected[:, len(_ENERGIES_KEV) // 2]
        return np.isnan(middle) | (np.abs(middle - self.background) > _FAINT_HU)


@dataclass(frozen=True, slots=True, eq=False)
class Match:
    """One placing of a layout.

    Attributes
    ----------
    angle : float
        Degrees counter-clockwise on the screen, -180 to 180.
    shift : ndarray, shape (2,)
        Where the layout's origin comes to lie, mm.
    cost : float
        Chi-squared.
    seen : dict of int to int
        Rod -> round object, for those within 4 standard deviations.
    visible : int
        Rods that ought to stand out.
    """

    angle: float
    shift: Floats
    cost: float
    seen: dict[int, int]
    visible: int

    def turned(self, vectors: Floats) -> Floats:
        """Return vectors (n, 2) of y and x turned by the angle."""
        return _turned(vectors, math.radians(self.angle))

    def placed(self, centers: Floats) -> Floats:
        """Return where points of the layout come to lie."""
        return self.turned(centers) + self.shift


def _turned(vectors: Floats, angle: float | Floats) -> Floats:
    """Turn (y, x) counter-clockwise on a screen whose y points down; angles add an axis."""
    c, s = np.cos(angle)[..., None], np.sin(angle)[..., None]
    y, x = vectors[:, 0], vectors[:, 1]
    return np.stack([c * y - s * x, c * x + s * y], axis=-1)


def _expected(layout: Sequence[LayoutRod]) -> tuple[Floats, Floats]:
    water = water_attenuation(_ENERGIES_KEV)
    expected = np.full((len(layout), len(_ENERGIES_KEV)), np.nan)
    tolerance = np.full(expected.shape, np.nan)
    for k, rod in enumerate(layout):
        if rod.material is None:
            continue
        expected[k] = ct_number(rod.material.mu(_ENERGIES_KEV), water)
        share = rod.material.density_uncertainty_g_cm3 / rod.material.density_g_cm3
        tolerance[k] = np.hypot(_READING_HU, share * (expected[k] + 1000.0))
    return expected, tolerance


def _costs(scene: Scene, angles: Floats, shifts: Floats) -> tuple[Floats, Floats]:
    """Return chi-squared of placings, and distances (placings, rods, objects)."""
    placed = _turned(scene.centers, angles) + shifts[:, None, :]
    apart = np.linalg.norm(placed[:, :, None, :] - scene.spots[None, None], axis=-1)
    apart = np.where(scene.sized[None], apart, np.inf)
    far = np.minimum((apart.min(axis=2) / scene.sigma) ** 2, CAP)
    geometry = (far * scene.visible).sum(axis=1)
    return geometry + _number_costs(scene, placed), apart


def _number_costs(scene: Scene, placed: Floats) -> Floats:
    """Return the part of the CT numbers, at the energy that suits each placing best."""
    read = np.empty(placed.shape[:2])
    for k, rod in enumerate(scene.layout):
        table = scene.means[0.5 * rod.diameter_mm]
        place = np.rint(placed[:, k] / scene.spacing).astype(int)
        inside = np.all((place >= 0) & (place < table.shape), axis=1)
        place = np.clip(place, 0, np.array(table.shape) - 1)
        read[:, k] = np.where(inside, table[place[:, 0], place[:, 1]], 1e6)
    known = ~np.isnan(scene.expected[:, 0])
    if not known.any():
        return np.zeros(len(placed))
    off = (read[:, known, None] - scene.expected[None, known]) / scene.tolerance[None, known]
    least: Floats = np.minimum(off**2, CAP).sum(axis=1).min(axis=1)
    return least


def _hypotheses(scene: Scene) -> tuple[Floats, Floats]:
    """Return the turns and shifts that lay a pair of rods on a pair of round objects."""
    centers, spots = scene.centers, scene.spots
    rods = np.array([(i, j) for i in range(len(centers)) for j in range(i)])
    pairs = np.array([(a, b) for a in range(len(spots)) for b in range(len(spots)) if a != b])
    along = centers[rods[:, 1]] - centers[rods[:, 0]]
    across = spots[pairs[:, 1]] - spots[pairs[:, 0]]
    length, distance = np.hypot(*along.T), np.hypot(*across.T)
    fits = np.abs(length[:, None] - distance[None]) < 4 * scene.sigma
    fits &= scene.sized[rods[:, 0]][:, pairs[:, 0]] & scene.sized[rods[:, 1]][:, pairs[:, 1]]
    r, p = np.nonzero(fits & (length[:, None] > 2 * scene.sigma))
    # angles on the screen, where y points down
    turn = np.arctan2(-across[p, 0], across[p, 1]) - np.arctan2(-along[r, 0], along[r, 1])
    middle = 0.5 * (centers[rods[r, 0]] + centers[rods[r, 1]])
    target = 0.5 * (spots[pairs[p, 0]] + spots[pairs[p, 1]])
    c, s = np.cos(turn), np.sin(turn)
    lain = np.stack([c * middle[:, 0] - s * middle[:, 1], c * middle[:, 1] + s * middle[:, 0]], 1)
    shifts = target - lain
    reach = max(float(np.hypot(*centers.T).max()), 1.0)
    coarse = np.column_stack([np.sin(turn) * reach, np.cos(turn) * reach, shifts]) / scene.sigma
    _, first = np.unique(np.rint(coarse), axis=0, return_index=True)
    return turn[first], shifts[first]


def best_matches(scene: Scene) -> tuple[Match | None, Match | None]:
    """Return the best placing and the best one that calls a place by another material."""
    angles, shifts = _hypotheses(scene)
    if not len(angles):
        return None, None
    costs = np.concatenate(
        [
            _costs(scene, angles[k : k + _CHUNK], shifts[k : k + _CHUNK])[0]
            for k in range(0, len(angles), _CHUNK)
        ]
    )
    closer: list[Match] = []
    for k in np.argsort(costs, kind="stable"):
        if len(closer) == _CLOSER:
            break
        place = _turned(scene.centers, angles[k : k + 1])[0] + shifts[k]
        if all(_moved(scene, one, place) > 2 * scene.sigma for one in closer):
            closer.append(_refined(scene, float(angles[k]), shifts[k]))
    closer.sort(key=lambda one: one.cost)
    best = closer[0]
    others = (one for one in closer[1:] if not _same_names(scene, best, one))
    return best, next(others, None)


def _moved(scene: Scene, match: Match, place: Floats) -> float:
    return float(np.hypot(*(match.placed(scene.centers) - place).T).max())


def _same_names(scene: Scene, one: Match, other: Match) -> bool:
    """Tell whether two placings call every place by the same material."""
    first, second = one.placed(scene.centers), other.placed(scene.centers)
    apart = np.linalg.norm(first[:, None] - second[None], axis=-1)
    for k, j in enumerate(apart.argmin(axis=1)):
        a, b = scene.layout[k], scene.layout[int(j)]
        if apart[k, j] > 0.5 * a.diameter_mm or (a.material, a.name) != (b.material, b.name):
            return False
    return True


def _refined(scene: Scene, angle: float, shift: Floats) -> Match:
    """Return a placing fitted by least squares to the round objects that it meets."""
    for _ in range(3):
        seen = _met(scene, angle, shift)
        if len(seen) < 2:
            break
        rods = scene.centers[list(seen)]
        spots = scene.spots[list(seen.values())]
        a, b = rods - rods.mean(axis=0), spots - spots.mean(axis=0)
        cross = float(np.sum(a[:, 0] * b[:, 1] - a[:, 1] * b[:, 0]))
        angle = math.atan2(cross, float(np.sum(a * b)))
        shift = spots.mean(axis=0) - _turned(rods, np.array(angle)).mean(axis=0)
    cost, _ = _costs(scene, np.array([angle]), shift[None])
    degrees = (math.degrees(angle) + 180.0) % 360.0 - 180.0
    visible = int(np.count_nonzero(scene.visible))
    return Match(degrees, shift, float(cost[0]), _met(scene, angle, shift), visible)


def _met(scene: Scene, angle: float, shift: Floats) -> dict[int, int]:
    """Return which rod meets which round object, each object once."""
    _, apart = _costs(scene, np.array([angle]), shift[None])
    met: dict[int, int] = {}
    taken: set[int] = set()
    near = apart[0]
    for k in np.argsort(near.min(axis=1)):
        j = int(near[k].argmin())
        if near[k, j] < 4 * scene.sigma and j not in taken:
            met[int(k)] = j
            taken.add(j)
    return met
