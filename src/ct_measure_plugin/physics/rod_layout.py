"""Rods of a known layout found on a slice, however the phantom is turned and shifted."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.results import Caution, NotMeasured, Quantity, Result
from ct_measure_plugin.physics.rod_candidates import find_candidates
from ct_measure_plugin.physics.rod_matching import Match, Scene, best_matches

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    from ct_measure_plugin.physics.attenuation import Material

    Floats = NDArray[np.float64]

__all__ = ["LayoutRod", "PlacedRod", "RodsFound", "find_rods"]

#: Fewer rods fix no turn and shift that could also be wrong.
FEWEST_RODS = 3

#: Share of the rods that ought to stand out that must be seen.
SEEN_SHARE = 0.6

#: Two placings whose chi-squared differ by less are told apart by chance (3 standard deviations).
TELLING = 9.0

#: Distances that differ from the layout's by more are cautioned, share.
SCALE_OFF = 0.005


@dataclass(frozen=True, slots=True)
class LayoutRod:
    """Where a rod is in its phantom, and what it is.

    Parameters
    ----------
    center_mm : (float, float)
        y (down) and x, about any origin.
    diameter_mm : float
        Greater than 0.
    material : Material or None
        None if it is not known; then its CT number tells nothing.
    name : str
        What people call it.
    """

    center_mm: tuple[float, float]
    diameter_mm: float
    material: Material | None = None
    name: str = ""

    def __post_init__(self) -> None:
        if not all(math.isfinite(c) for c in self.center_mm):
            raise ArgumentError("center_mm", "must be finite", self.center_mm)
        if not 0 < self.diameter_mm < math.inf:
            raise ArgumentError("diameter_mm", "must be greater than 0", self.diameter_mm)


@dataclass(frozen=True, slots=True)
class PlacedRod:
    """A rod of the layout on the slice.

    Attributes
    ----------
    name, material : str
        As the layout has them.
    y, x : Quantity
        Its centre, mm from the centre of the first pixel.
    diameter : Quantity
        Measured where it was seen, else the layout's, mm.
    seen : str
        "seen", or "placed" where it does not stand out and follows from the others.
    """

    name: str
    material: str
    y: Quantity
    x: Quantity
    diameter: Quantity
    seen: str


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RodsFound(Result):
    """The layout on the slice.

    Attributes
    ----------
    rotation : Quantity
        By what the layout is turned, degrees counter-clockwise on the screen, -180 to 180.
    shift_y, shift_x : Quantity
        Where the layout's origin is, mm from the centre of the first pixel.
    scale : Quantity
        Distances between rods over the layout's.
    farthest : Quantity
        The largest distance of a rod that was seen from where the layout has it, mm.
    rods : tuple of PlacedRod
        In the layout's order.
    """

    rotation: Quantity
    shift_y: Quantity
    shift_x: Quantity
    scale: Quantity
    farthest: Quantity
    rods: tuple[PlacedRod, ...]

    def moved(self, y_mm: float, x_mm: float) -> RodsFound:
        """Return the same with places counted from another origin."""

        def by(place: Quantity, step: float) -> Quantity:
            return replace(place, value=place.value + step)

        return replace(
            self,
            shift_y=by(self.shift_y, y_mm),
            shift_x=by(self.shift_x, x_mm),
            rods=tuple(replace(rod, y=by(rod.y, y_mm), x=by(rod.x, x_mm)) for rod in self.rods),
        )


def find_rods(
    image: ArrayLike,
    layout: Sequence[LayoutRod],
    *,
    spacing_mm: tuple[float, float],
    tolerance_mm: float = 0.5,
) -> RodsFound | NotMeasured:
    """Find the rods of a layout on a slice, at any rotation and shift.

    Parameters
    ----------
    image : array, shape (ny, nx)
        CT numbers.
    layout : sequence of LayoutRod
        At least three rods.
    spacing_mm : (float, float)
        dy, dx.
    tolerance_mm : float
        Standard deviation with which rods keep their place in the phantom.

    Returns
    -------
    RodsFound or NotMeasured
        NotMeasured if too few rods stand out, if the layout fits in two ways, or if it fits only
        mirrored.

    Raises
    ------
    ArgumentError
        If the image, the layout or a length is out of range.

    Notes
    -----
    Round objects of the layout's diameters are found to sub-pixel. Every pair of them is laid on
    every pair of rods of the same distance; a placing's chi-squared counts, rod by rod and at most
    16 each, how far the nearest round object is and how far the CT number there is from the
    material's at the energy that suits best. Rods that would not stand out from their surroundings
    need not be seen. The best placing must be better than every other one by a chi-squared of 9.

    Examples
    --------
    >>> places = ((10.0, 12.0), (10.0, 24.0), (28.0, 15.0))
    >>> y, x = 0.5 * np.mgrid[0:80, 0:80]
    >>> image = 100.0 * sum(np.hypot(y - a, x - b) < 3 for a, b in places)
    >>> turned = [LayoutRod((x, -y), 6.0) for y, x in places]  # a quarter turn
    >>> found = find_rods(image, turned, spacing_mm=(0.5, 0.5))
    >>> round(found.rotation.value, 1), round(found.rods[0].y.value, 1)
    (90.0, 10.0)
    """
    pixels = _checked(image, layout, spacing_mm, tolerance_mm)
    candidates = find_candidates(pixels, spacing_mm, [0.5 * rod.diameter_mm for rod in layout])
    if len(candidates) < FEWEST_RODS:
        return _too_few(len(candidates), len(layout))
    scene = Scene.of(pixels, spacing_mm, candidates, layout, tolerance_mm)
    best, other = best_matches(scene)
    mirrored, _ = best_matches(scene.mirrored())
    turned_over = mirrored is not None and _enough(mirrored)
    if best is None or not _enough(best):
        if turned_over:
            return _only_mirrored()
        return _too_few(0 if best is None else len(best.seen), len(layout))
    if turned_over and mirrored is not None and mirrored.cost + TELLING <= best.cost:
        return _only_mirrored()
    if other is not None and other.cost - best.cost < TELLING:
        turn = (other.angle - best.angle + 180.0) % 360.0 - 180.0
        return NotMeasured(
            f"the layout fits in two ways, {abs(turn):.0f}° apart, and the CT numbers do not tell"
            f" them apart (chi-squared {best.cost:.1f} and {other.cost:.1f})",
            "enter materials and densities in the layout, add a rod that breaks its symmetry, or"
            " pick the rods by hand",
        )
    return _result(scene, best)


def _checked(
    image: ArrayLike, layout: Sequence[LayoutRod], spacing: tuple[float, float], tolerance: float
) -> Floats:
    pixels = np.asarray(image, dtype=float)
    if pixels.ndim != 2 or min(pixels.shape) < 8:
        raise ArgumentError("image", "must have shape (ny, nx), at least 8 each", pixels.shape)
    if not bool(np.all(np.isfinite(pixels))):
        raise ArgumentError("image", "must be finite", "values that are not")
    if len(layout) < FEWEST_RODS:
        raise ArgumentError("layout", f"must hold at least {FEWEST_RODS} rods", len(layout))
    if not all(math.isfinite(step) and step > 0 for step in spacing):
        raise ArgumentError("spacing_mm", "must be (dy, dx), each greater than 0", spacing)
    if not tolerance > 0:
        raise ArgumentError("tolerance_mm", "must be greater than 0", tolerance)
    return pixels


def _enough(match: Match) -> bool:
    return len(match.seen) >= max(FEWEST_RODS, SEEN_SHARE * match.visible)


def _too_few(seen: int, wanted: int) -> NotMeasured:
    return NotMeasured(
        f"{seen} of the layout's {wanted} rods were found on the slice",
        "choose a slice through the rods, average several slices, check the layout's diameters and"
        " distances, or pick the rods by hand",
    )


def _only_mirrored() -> NotMeasured:
    return NotMeasured(
        "the layout fits only as its mirror image",
        "the slices are seen from the other side: change the sign of every x in the layout, or"
        " check the orientation of the series",
    )


def _result(scene: Scene, match: Match) -> RodsFound:
    seen = sorted(match.seen)
    placed = match.placed(scene.centers)
    off = np.array([scene.candidates[match.seen[k]].center - placed[k] for k in seen])
    about = scene.centers[seen] - scene.centers[seen].mean(axis=0)
    own = np.array([scene.candidates[match.seen[k]].u_center for k in seen])
    freedom = 2 * len(seen) - 3
    spread = math.sqrt(float(np.sum(off**2)) / freedom + float(np.mean(own**2)))
    size = math.sqrt(float(np.sum(about**2)))
    stretch = float(np.sum((match.turned(about) + off) * match.turned(about))) / size**2
    u_origin = spread * math.sqrt(
        1 / len(seen) + float(np.sum(scene.centers[seen].mean(axis=0) ** 2)) / size**2
    )
    far = int(np.argmax(np.hypot(*off.T)))
    scale = Quantity(stretch, "", spread / size)
    cautions = []
    if abs(stretch - 1) > max(SCALE_OFF, 3 * spread / size):
        cautions.append(
            Caution(
                "layout-scale",
                f"Distances between the rods are {100 * (stretch - 1):+.1f} % off the layout's.",
                "Check the layout and the pixel size.",
            )
        )
    rods = _rods(scene, match, placed, spread)
    hidden = [rod.name for rod in rods if rod.seen == "placed"]
    if hidden:
        cautions.append(
            Caution(
                "rod-placed",
                f"{', '.join(hidden)}: not seen, placed by the layout.",
                "Look whether the region lies well inside the rod.",
            )
        )
    return RodsFound(
        rotation=Quantity(match.angle, "°", math.degrees(spread / size)),
        shift_y=Quantity(float(match.shift[0]), "mm", u_origin),
        shift_x=Quantity(float(match.shift[1]), "mm", u_origin),
        scale=scale,
        farthest=Quantity(float(np.hypot(*off[far])), "mm", float(own[far])),
        rods=tuple(rods),
        cautions=tuple(cautions),
    )


def _rods(scene: Scene, match: Match, placed: Floats, spread: float) -> list[PlacedRod]:
    found = []
    for k, rod in enumerate(scene.layout):
        name = rod.name or (rod.material.name if rod.material else f"rod {k + 1}")
        material = rod.material.name if rod.material else ""
        if k in match.seen:
            one = scene.candidates[match.seen[k]]
            place, doubt, status = one.center, one.u_center, "seen"
            diameter = Quantity(2 * one.radius, "mm", 2 * one.u_center)
        else:
            place, doubt, status = (float(placed[k, 0]), float(placed[k, 1])), spread, "placed"
            diameter = Quantity(rod.diameter_mm, "mm", 0.0)
        y, x = (Quantity(float(c), "mm", doubt) for c in place)
        found.append(PlacedRod(name, material, y, x, diameter, status))
    return found
