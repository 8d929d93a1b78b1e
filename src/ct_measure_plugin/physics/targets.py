"""Edges, rods and wires found on one slice, and the boxes that would measure an MTF well.

A slice of a phantom shows straight edges, circular edges of rods and small bright spots of wires
or beads. This module finds them, proposes for each a region in mm in which its MTF can be measured,
and says of the others why they would not do.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from scipy import ndimage

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.bright_spots import find_spots
from ct_measure_plugin.physics.edge_points import EdgePoints, find_edge_points
from ct_measure_plugin.physics.mtf_curve import checked_spacing
from ct_measure_plugin.physics.results import Quantity, Result
from ct_measure_plugin.physics.round_objects import round_objects
from ct_measure_plugin.physics.straight_pieces import straight_pieces
from ct_measure_plugin.physics.target_boxes import edge_trial, marks_of, rod_trial, wire_trial
from ct_measure_plugin.physics.target_trials import Scene, Target, Trial, Unsuitable, try_out

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from numpy.typing import ArrayLike, NDArray

    from ct_measure_plugin.physics.bright_spots import Spot
    from ct_measure_plugin.physics.round_objects import Round

    Floats = NDArray[np.float64]
    Flags = NDArray[np.bool_]

__all__ = ["Target", "TargetsFound", "Unsuitable", "find_targets"]

#: SDs in pixels of the smoothing before edges are looked for: of all, and of faint ones.
FINE_PX, COARSE_PX = 1.5, 3.0

#: Refused candidates that are told.
MOST_TOLD = 40

#: Fewest pixels a side of a slice on which anything is looked for.
LEAST_PIXELS = 24

#: Pixels about the outside of the reconstructed circle in which nothing is looked for.
BORDER_PX = 5


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TargetsFound(Result):
    """What a slice offers for measuring an MTF.

    Attributes
    ----------
    targets : tuple of Target
        The most certain f50 first.
    others : tuple of Unsuitable
        What was found and would not do, the largest first.
    blur : Quantity or None
        Median full width at half maximum of the edges' line spread functions, mm; its uncertainty
        is their scatter. None if no edge was measured.
    """

    targets: tuple[Target, ...]
    others: tuple[Unsuitable, ...]
    blur: Quantity | None = None


def find_targets(
    image: ArrayLike,
    *,
    spacing_mm: tuple[float, float],
    origin_mm: tuple[float, float] = (0.0, 0.0),
    z_mm: float | None = None,
    padding: NDArray[np.bool_] | None = None,
    limits: tuple[float, float] | None = None,
    unit: str = "HU",
    most: int = 12,
) -> TargetsFound:
    """Find straight edges, rods and wires on a slice, and boxes that would measure their MTF well.

    Parameters
    ----------
    image : array, shape (ny, nx)
        CT numbers of one slice.
    spacing_mm : (float, float)
        dy, dx.
    origin_mm : (float, float)
        y and x of the centre of pixel (0, 0) in the frame of the regions.
    z_mm : float, optional
        Where the slice lies; the regions carry it.
    padding : ndarray of bool, shape (ny, nx), optional
        True where the slice holds no data.
    limits : (float, float), optional
        Lowest and highest value that the encoding can hold.
    unit : str
        Unit of the values.
    most : int
        So many candidates are measured, the most promising first.

    Returns
    -------
    TargetsFound
        With no targets if there is nothing to measure.

    Raises
    ------
    ArgumentError
        If the image has fewer than 24 pixels a side or holds no finite numbers.

    Notes
    -----
    Edge points clear of the noise (Canny's, at two scales) are gathered into circles and straight
    pieces; spots are peaks of a difference of Gaussians. About each, the largest box is sought
    that no other edge enters. Of each kind, the candidates that noise would trouble least (by the
    Cramér-Rao bound of a Gaussian blur) are then measured with the measurements' own default
    methods, so a box that is proposed does measure, and a reason is the measurement's own.

    Examples
    --------
    >>> from scipy.special import ndtr
    >>> y, x = np.mgrid[0:96, 0:96] * 0.5
    >>> image = 300 * ndtr((9.0 - np.hypot(y - 24, x - 23)) / 0.5)
    >>> found = find_targets(image, spacing_mm=(0.5, 0.5), z_mm=12.0)
    >>> [(one.kind, round(one.radius.value, 1), one.region.center_mm) for one in found.targets]
    [('rod', 9.0, (24.0, 23.0))]
    """
    steps = checked_spacing(spacing_mm)
    pixels, inside = _checked(image, padding)
    scene = Scene(pixels, steps, origin_mm, z_mm, unit, limits)
    if float(np.ptp(pixels)) == 0:
        return TargetsFound(targets=(), others=())
    candidates = list(_candidates(scene, inside))
    trials = [one for one in candidates if isinstance(one, Trial)]
    refused = [one for one in candidates if isinstance(one, Unsuitable)]
    trials = _by_turns(trials)
    refused += [
        one.refused(
            scene,
            f"not tried: {most} others promise a more certain answer",
            "draw a box about it to measure it all the same",
        )
        for one in trials[most:]
    ]
    found: list[Target] = []
    # edges and rods first: a spot is compared with them
    for trial in sorted(trials[:most], key=lambda one: one.kind == "wire"):
        one = try_out(scene, trial, found)
        (found if isinstance(one, Target) else refused).append(one)  # type: ignore[arg-type]
    refused.sort(key=lambda one: -one.size_mm)
    return TargetsFound(
        targets=_named(found),
        others=tuple(refused[:MOST_TOLD]),
        blur=_blur(found),
    )


def _checked(image: ArrayLike, padding: Flags | None) -> tuple[Floats, Flags | None]:
    """Return the pixels, with padding filled evenly, and where to look."""
    pixels = np.asarray(image, dtype=float)
    if pixels.ndim != 2 or min(pixels.shape) < LEAST_PIXELS:
        raise ArgumentError(
            "image", f"must have shape (ny, nx), at least {LEAST_PIXELS} each", pixels.shape
        )
    outside = np.zeros(pixels.shape, dtype=bool) if padding is None else np.asarray(padding)
    if outside.shape != pixels.shape:
        raise ArgumentError("padding", "must have the image's shape", outside.shape)
    outside = outside | ~np.isfinite(pixels)
    if not outside.any():
        return pixels, None
    if outside.all():
        raise ArgumentError("image", "must hold finite numbers", "none")
    nearest = ndimage.distance_transform_edt(outside, return_distances=False, return_indices=True)
    filled: Floats = pixels[tuple(nearest)]
    return filled, ~ndimage.binary_dilation(outside, iterations=BORDER_PX)


def _candidates(scene: Scene, inside: Flags | None) -> Iterator[Trial | Unsuitable]:
    """Yield everything that looks like a target, with a box or with the reason why it has none."""
    pixel = scene.pixel
    spots = find_spots(scene.image, scene.spacing_mm, inside)
    fine, coarse = (
        find_edge_points(scene.image, scene.spacing_mm, scale_px=scale, mask=inside)
        for scale in (FINE_PX, COARSE_PX)
    )
    marks = marks_of(scene, (fine, coarse), inside)
    for spot in spots:
        yield wire_trial(scene, spot, marks)
    # faint edges are those that only the coarse scale sees
    faint = coarse.only(coarse.away_from(fine, 4 * pixel))
    free = [_away_from_spots(points, spots, pixel) for points in (fine, faint)]
    rounds: list[Round] = []
    for one, points in _circles((free[0], _away_from_spots(coarse, spots, pixel)), pixel):
        if any(one.same_as(other) for other in rounds):
            continue
        rounds.append(one)
        found = rod_trial(scene, one, points.only(one.points), marks)
        if found is not None:
            yield found
    for points in free:
        left = np.ones(len(points), dtype=bool)
        for one in rounds:
            left &= np.abs(one.outside(points.y, points.x)) > max(3 * pixel, 0.06 * one.radius)
        rest = points.only(left)
        for piece in straight_pieces(rest, pixel):
            yield edge_trial(scene, piece, rest.only(piece.points), marks)


def _circles(scales: Sequence[EdgePoints], pixel: float) -> list[tuple[Round, EdgePoints]]:
    """Return the circles of several scales, the best seen first, with the points they rest on."""
    found = [(one, points) for points in scales for one in round_objects(points, pixel)]
    return sorted(found, key=lambda pair: -pair[0].seen)


def _by_turns(trials: list[Trial]) -> list[Trial]:
    """Return the most promising of each kind by turns, so that none crowds the others out."""
    place: list[tuple[int, float, Trial]] = []
    for kind in ("rod", "edge", "wire"):
        own = sorted((one for one in trials if one.kind == kind), key=lambda one: one.doubt)
        place += [(turn, one.doubt, one) for turn, one in enumerate(own)]
    return [one for _, _, one in sorted(place, key=lambda row: row[:2])]


def _away_from_spots(points: EdgePoints, spots: list[Spot], pixel: float) -> EdgePoints:
    kept = np.ones(len(points), dtype=bool)
    for spot in spots:
        away = np.hypot(points.y - spot.center[0], points.x - spot.center[1])
        kept &= away > 1.5 * spot.fwhm + 2 * pixel
    return points.only(kept)


def _blur(found: list[Target]) -> Quantity | None:
    widths = [one.width.value for one in found if one.width is not None and one.kind != "wire"]
    if not widths:
        return None
    return Quantity(float(np.median(widths)), "mm", float(np.std(widths)))


def _named(found: list[Target]) -> tuple[Target, ...]:
    """Return targets in their order of merit, their regions named after kind and number."""
    # of a slice without noise, the larger box
    found.sort(key=lambda one: (one.doubt, -one.region.area_mm2))
    count = dict.fromkeys(("edge", "rod", "wire"), 0)
    named = []
    for one in found:
        count[one.kind] += 1
        region = replace(one.region, name=f"{one.kind}-{count[one.kind]}")
        named.append(replace(one, region=region))
    return tuple(named)
