"""Boxes about edges, rods and wires that no other object enters, or why there is none."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from scipy import ndimage

from ct_measure_plugin.physics.clear_space import (
    LEAST_FWHM,
    MARGIN_FWHM,
    WANTED_FWHM,
    Space,
    box_about,
    box_along,
)
from ct_measure_plugin.physics.edge_points import EdgePoints, rise_across
from ct_measure_plugin.physics.target_trials import Scene, Trial, Unsuitable

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.physics.bright_spots import Spot
    from ct_measure_plugin.physics.edge_points import Rise
    from ct_measure_plugin.physics.round_objects import Round
    from ct_measure_plugin.physics.straight_pieces import Straight

    Floats = NDArray[np.float64]
    Flags = NDArray[np.bool_]

__all__ = ["edge_trial", "marks_of", "rod_trial", "wire_trial"]

#: Pixels to either side over which the mean profile across an edge is taken.
PROFILE_PX = 10.0

#: Points within so many pixels of an object belong to it, whichever scale they were found at.
OWN_PX = 3.0

#: Fewest pixels a side of the boxes of edges and rods, and of wires.
LEAST_PX, LEAST_WIRE_PX = 16, 12

#: An edge is not tried below this lean, a little under what is asked for, as it is found roughly.
ROUGH_LEAN = 1.2

#: Bend of an edge over its FWHM beyond which it is curved.
MOST_BEND = 0.3

#: Least possible uncertainty of a width beyond which a trial is spared: the fit's is some three
#: times as large, and 30 % is refused.
HOPELESS = 0.12

#: Edges whose step is less than this share of an object's contrast do not disturb it.
WEAK_SHARE = 0.05

#: A rod's radius must be so many sigma of its blur.
LEAST_RADIUS = 5.0

_ALONE = "use a part of the phantom where it stands alone, or draw a smaller box by hand"


def marks_of(scene: Scene, points: Sequence[EdgePoints], inside: Flags | None) -> Space:
    """Return what no box may hold but its own object: edge points and the border of the padding."""
    y = [one.y for one in points]
    x = [one.x for one in points]
    step = [one.step for one in points]
    if inside is not None:
        row, column = np.nonzero(inside & ~ndimage.binary_erosion(inside, border_value=1))
        y.append(np.asarray(row * scene.spacing_mm[0], dtype=np.float64))
        x.append(np.asarray(column * scene.spacing_mm[1], dtype=np.float64))
        step.append(np.full(len(row), math.inf))
    shape = scene.image.shape[0], scene.image.shape[1]
    parts = (np.concatenate(part) for part in (y, x, step))
    return Space(shape, scene.spacing_mm, *parts)


def edge_trial(
    scene: Scene, piece: Straight, points: EdgePoints, marks: Space
) -> Trial | Unsuitable:
    """Return the best box on a straight edge, or why there is none."""
    pixel = scene.pixel
    rise = rise_across(scene.image, scene.spacing_mm, points, PROFILE_PX * pixel)
    fwhm = pixel if rise is None else rise.fwhm
    doubt = math.inf if rise is None else rise.doubt(piece.length, math.prod(scene.spacing_mm))
    trial = Trial("edge", piece.middle, (0.0, 0.0), piece.middle, piece.length, doubt, fwhm)
    if piece.lean < ROUGH_LEAN:
        return trial.refused(
            scene,
            f"the edge leans {piece.lean:.2g}° from the pixel grid; at least 1.5° is needed",
            "turn the phantom by a few degrees",
        )
    if piece.bend > MOST_BEND * fwhm + 3 * piece.bend_doubt:
        return trial.refused(
            scene,
            f"the edge is curved: it bends by {piece.bend:.2g} mm over {piece.length:.3g} mm",
            "measure it as a circular edge, or a shorter piece of it",
        )
    if (hopeless := _hopeless(scene, trial, rise)) is not None:
        return hopeless
    space = marks.strong(WEAK_SHARE * (0.0 if rise is None else rise.contrast))
    own = np.abs(piece.distance(space.y, space.x)) <= OWN_PX * pixel
    best = box_along(space.without(own), piece, fwhm, least_px=LEAST_PX)
    if best is None:
        return _crowded_edge(scene, trial, piece, space.without(own))
    box, length = best
    dy, dx = scene.spacing_mm
    return Trial(
        "edge",
        ((box.top + box.bottom) / 2 * dy, (box.left + box.right) / 2 * dx),
        (box.shape[0] / 2 * dy, box.shape[1] / 2 * dx),
        piece.middle,
        piece.length,
        doubt * math.sqrt(piece.length / length),
        fwhm,
    )


def _hopeless(scene: Scene, trial: Trial, rise: Rise | None) -> Unsuitable | None:
    if rise is not None and trial.doubt < HOPELESS:
        return None
    ratio = 0.0 if rise is None or rise.noise <= 0 else rise.contrast / rise.noise
    return trial.refused(
        scene,
        f"the contrast is too low: {ratio:.2g} times the noise",
        "average more slices, or measure a stronger contrast",
    )


def _crowded_edge(scene: Scene, trial: Trial, piece: Straight, space: Space) -> Unsuitable:
    needed = LEAST_FWHM * trial.width_mm
    steps = min(abs(math.cos(piece.normal)), 1.0), min(abs(math.sin(piece.normal)), 1.0)
    across = piece.length * max(steps)
    if across < LEAST_PX * scene.pixel:
        return trial.refused(
            scene,
            f"only {piece.length:.2g} mm of it are straight; {LEAST_PX * scene.pixel:.2g} mm"
            f" ({LEAST_PX} pixels) are needed",
            "use a longer edge, or smaller pixels",
        )
    t = (space.y - piece.middle[0]) * math.cos(piece.normal)
    t = t - (space.x - piece.middle[1]) * math.sin(piece.normal)
    beside = np.abs(t) <= 0.25 * piece.length
    nearest = np.abs(piece.distance(space.y, space.x)[beside]).min(initial=math.inf)
    border = _to_border(scene, piece.middle)
    if border < min(nearest, needed + piece.length / 4):
        return trial.refused(
            scene,
            "its box would leave the image",
            "reconstruct a larger field of view, or move the phantom",
        )
    return trial.refused(
        scene,
        f"another edge lies {nearest:.2g} mm from it; {needed:.2g} mm of even material are needed"
        f" on either side, and {MARGIN_FWHM * trial.width_mm:.2g} mm more"
        if math.isfinite(nearest)
        else "no box on it is free of other edges",
        _ALONE,
    )


def _to_border(scene: Scene, place: tuple[float, float]) -> float:
    sides: list[float] = []
    for middle, step, count in zip(place, scene.spacing_mm, scene.image.shape, strict=True):
        sides += [middle, (count - 1) * step - middle]
    return min(sides)


def rod_trial(
    scene: Scene, one: Round, points: EdgePoints, marks: Space
) -> Trial | Unsuitable | None:
    """Return the best disc about a rod, why there is none, or None if it is no rod."""
    pixel = scene.pixel
    reach = min(PROFILE_PX * pixel, 0.9 * one.radius)
    rise = rise_across(scene.image, scene.spacing_mm, points, reach)
    fwhm = pixel if rise is None else rise.fwhm
    around = 2 * math.pi * one.radius
    doubt = math.inf if rise is None else rise.doubt(around, math.prod(scene.spacing_mm))
    trial = Trial("rod", one.center, (0.0, 0.0), one.center, 2 * one.radius, doubt, fwhm)
    if _to_border(scene, one.center) < one.radius + pixel:
        return trial.refused(
            scene,
            "the circle leaves the image",
            "reconstruct a larger field of view, or move the phantom",
        )
    if not one.whole:
        return (
            None
            if one.radius < 5 * pixel
            else trial.refused(
                scene,
                f"only {100 * one.seen:.0f} % of the circle stand out",
                "average more slices, or measure a rod of stronger contrast that stands alone",
            )
        )
    if (hopeless := _hopeless(scene, trial, rise)) is not None:
        return hopeless
    if one.radius < LEAST_RADIUS * fwhm / 2.3548:
        return trial.refused(
            scene,
            f"the radius, {one.radius:.2g} mm, is less than {LEAST_RADIUS:g} sigma of the blur",
            "measure a thicker rod",
        )
    space = marks.strong(WEAK_SHARE * (0.0 if rise is None else rise.contrast))
    outside = one.outside(space.y, space.x)
    own = np.abs(outside) <= max(OWN_PX * pixel, 0.06 * one.radius)
    needed = max(LEAST_FWHM * fwhm, 4 * pixel)
    others = outside[~own]
    # what lies deep inside a cylinder does not touch its edge
    inner = -others[others < 0].max(initial=-math.inf)
    if inner < needed:
        return trial.refused(
            scene,
            f"another edge lies {inner:.2g} mm inside its edge; {needed:.2g} mm are needed",
            _ALONE,
        )
    outer = float(others[others > 0].min(initial=math.inf))
    room = min(outer - MARGIN_FWHM * fwhm, _to_border(scene, one.center) - one.radius)
    wanted = max(WANTED_FWHM * fwhm, 8 * pixel)
    half = box_about(
        space.without(own | (outside < 0)),
        one.center,
        wanted_mm=one.radius + wanted,
        least_mm=one.radius + needed,
        margin_mm=MARGIN_FWHM * fwhm,
    )
    if half is None and room >= needed:
        half = one.radius + min(room, wanted)  # others lie only in the corners of its square
    if half is None:
        border = _to_border(scene, one.center) - one.radius
        near = "the border of the image" if border < outer else "another edge"
        return trial.refused(
            scene,
            f"{near} lies {min(border, outer):.2g} mm outside its edge;"
            f" {needed + MARGIN_FWHM * fwhm:.2g} mm are needed",
            _ALONE,
        )
    return Trial("rod", one.center, (half, half), one.center, 2 * one.radius, doubt, fwhm)


def wire_trial(scene: Scene, spot: Spot, marks: Space) -> Trial | Unsuitable:
    """Return the best box about a wire or bead, or why there is none."""
    pixel, space = scene.pixel, marks.strong(WEAK_SHARE * abs(spot.height))
    away = np.hypot(space.y - spot.center[0], space.x - spot.center[1])
    own = away <= 1.5 * spot.fwhm + 2 * pixel
    least = max(3.0 * spot.fwhm, 0.5 * LEAST_WIRE_PX * pixel) + pixel
    half = box_about(
        space.without(own),
        spot.center,
        wanted_mm=max(WANTED_FWHM * spot.fwhm, LEAST_WIRE_PX * pixel) + pixel,
        least_mm=least,
        margin_mm=MARGIN_FWHM * spot.fwhm,
    )
    trial = Trial(
        "wire",
        spot.center,
        (half or 0.0, half or 0.0),
        spot.center,
        spot.fwhm,
        spot.doubt(math.prod(scene.spacing_mm)),
        spot.fwhm,
        spot,
    )
    if half is not None:
        return trial
    nearest = float(away[~own].min(initial=math.inf))
    border = _to_border(scene, spot.center)
    near = "the border of the image" if border < nearest else "another edge"
    return trial.refused(
        scene,
        f"{near} lies {min(border, nearest):.2g} mm from it;"
        f" {least + MARGIN_FWHM * spot.fwhm:.2g} mm are needed",
        _ALONE,
    )
