"""Values along a line, and the width of the edge or peak that it crosses."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.mtf_curve import checked_spacing, checked_stack
from ct_measure_plugin.physics.profile_samples import PathPoints, path_points, sample, together
from ct_measure_plugin.physics.profile_widths import (
    BACKGROUND,
    PLATEAU,
    Ends,
    Peak,
    crossings,
    edge_width,
    ends_of,
    peak_width,
)
from ct_measure_plugin.physics.results import Caution, Curve, NotMeasured, Quantity, Result

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

__all__ = ["LineProfile", "line_profile"]

#: Shortest profile, in pixels, and fewest points of one.
LEAST_PIXELS, LEAST_POINTS = 4.0, 8

_DRAW = "draw it across an edge or a peak"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LineProfile(Result):
    """A profile along a line or path.

    Attributes
    ----------
    edge_width : Quantity or NotMeasured
        Distance from 10 to 90 % of the step between the plateaus, mm.
    fwhm : Quantity or NotMeasured
        Full width at half maximum of a peak or trough between equal ends, mm.
    height : Quantity or NotMeasured
        Of that peak over the background; negative for a trough.
    middle : Quantity or NotMeasured
        Distance from the start to the middle of the peak, or of the edge, mm.
    step : Quantity
        Last plateau minus first plateau.
    mean, minimum, maximum : Quantity
        Of the profile.
    length : Quantity
        Arc length, mm.
    noise : Quantity
        SD of the profile's points at its ends, about straight lines.
    profile : Curve
        Mean over the width and the slices along the distance from the start, mm.
    sd : Curve or None
        SD of the values that each point is the mean of; None for a single line on one slice.
    crossings : Curve
        Where the profile crosses the level: distances in mm, numbered from 1.
    level : Quantity
        That level: half-way between the plateaus or up the peak, unless it was given.
    """

    edge_width: Quantity | NotMeasured
    fwhm: Quantity | NotMeasured
    height: Quantity | NotMeasured
    middle: Quantity | NotMeasured
    step: Quantity
    mean: Quantity
    minimum: Quantity
    maximum: Quantity
    length: Quantity
    noise: Quantity
    profile: Curve
    sd: Curve | None
    crossings: Curve
    level: Quantity


def line_profile(
    image: ArrayLike,
    points_mm: Sequence[tuple[float, float]],
    *,
    spacing_mm: tuple[float, float],
    width_mm: float = 0.0,
    order: Literal[0, 1, 3] = 3,
    step_mm: float | None = None,
    level: float | None = None,
    unit: str = "HU",
) -> LineProfile | NotMeasured:
    """Return the profile along a line or path.

    Parameters
    ----------
    image : array, shape (ny, nx) or (nz, ny, nx)
        One slice, or several that are averaged.
    points_mm : sequence of (float, float)
        Two ends or more corners as (y, x) in mm from the centre of pixel (0, 0).
    spacing_mm : (float, float)
        dy, dx.
    width_mm : float
        Width across the path over which values are averaged; parallel lines lie half a pixel apart
        or less.
    order : {0, 1, 3}
        Nearest pixel, linear, or cubic B-spline interpolation.
    step_mm : float, optional
        Distance between points; a tenth of the smaller pixel side by default.
    level : float, optional
        The level whose crossings are wanted.
    unit : str
        Unit of the values.

    Returns
    -------
    LineProfile or NotMeasured
        NotMeasured if the path leaves the image, is too short, or turns too sharply for its width.

    Raises
    ------
    ArgumentError
        If an argument is out of its range.

    Notes
    -----
    Distances are arc lengths in mm whatever the pixels' shape. Plateaus are the medians of the
    outer 20 % either side, the background of a peak that of the outer 15 %; crossings are
    interpolated linearly. Linear interpolation between pixels blurs: it widens an edge of 2.6 mm
    on pixels of 0.5 mm by 2 %, cubic interpolation by less than 0.2 %.

    Examples
    --------
    >>> from scipy.special import ndtr
    >>> x = np.arange(200) * 0.25
    >>> image = np.tile(100 * ndtr((x - 25) / 1.0), (40, 1))
    >>> found = line_profile(image, [(5, 10), (5, 40)], spacing_mm=(0.25, 0.25))
    >>> round(found.edge_width.value, 2), round(found.middle.value, 2)  # 2.5631 sigma
    (2.56, 15.0)
    """
    steps = checked_spacing(spacing_mm)
    stack = checked_stack(image, 2)
    corners = _checked(points_mm, width_mm, order, step_mm)
    pixel = min(steps)
    path = path_points(corners, step=step_mm or pixel / 10, width=width_mm, line_step=pixel / 2)
    length = float(path.distance[-1])
    if length < LEAST_PIXELS * max(steps) or len(path.distance) < LEAST_POINTS:
        return NotMeasured(
            f"the path is {length:.3g} mm long, {len(path.distance)} points; at least"
            f" {LEAST_PIXELS:g} pixels and {LEAST_POINTS} points are needed",
            "draw it longer",
        )
    values, inside = sample(stack, path.place, steps, order)
    own = path.own
    if 2 * int(own.sum(axis=0).min()) < len(own):
        return NotMeasured(
            f"the path turns too sharply for a width of {width_mm:.3g} mm: beside a short piece,"
            " less than half of the width is its own",
            "draw it less wide, or with longer pieces",
        )
    if not inside[own].all():
        share = 100 * float(np.mean(~inside[own]))
        return NotMeasured(
            f"{share:.0f} % of the path, or of the width beside it, lie outside the image",
            "draw it within the image",
        )
    numbers = _numbers(path, values, level, max(steps), unit)
    cautions = _cautions(path, values, numbers, order, max(steps))
    return LineProfile(**numbers, cautions=tuple(cautions))


def _checked(
    points: Sequence[tuple[float, float]], width: float, order: int, step: float | None
) -> Floats:
    corners = np.asarray(points, dtype=np.float64)
    if corners.ndim != 2 or corners.shape[1] != 2 or len(corners) < 2:
        raise ArgumentError("points_mm", "must be two or more (y, x)", points)
    if not bool(np.isfinite(corners).all()) or bool((np.diff(corners, axis=0) == 0).all(1).any()):
        raise ArgumentError("points_mm", "must be finite, each different from the next", points)
    if not (math.isfinite(width) and width >= 0):
        raise ArgumentError("width_mm", "must not be negative", width)
    if order not in (0, 1, 3):
        raise ArgumentError("order", "must be 0, 1 or 3", order)
    if step is not None and not step > 0:
        raise ArgumentError("step_mm", "must be greater than 0", step)
    return corners


def _numbers(
    path: PathPoints,
    values: Floats,
    level: float | None,
    pixel: float,
    unit: str,
) -> dict[str, Any]:
    d = path.distance
    profile, sd = together(values, path.own)
    plateaus = ends_of(d, profile, PLATEAU, pixel)
    shape, half = _shape(d, profile, plateaus, ends_of(d, profile, BACKGROUND, pixel), unit)
    at, slope = crossings(d, profile, half.value if level is None else level)
    noise = plateaus.noise
    count = max(float(d[-1]) / plateaus.correlation, 1.0)
    # fewer lines count beside a corner, so that less of the noise is averaged away
    count_of = path.own.sum(axis=0)
    doubts = noise * np.sqrt(count_of.max() / count_of)
    return shape | {
        "step": Quantity(plateaus.high - plateaus.low, unit, math.sqrt(2) * plateaus.doubt),
        "mean": Quantity(float(profile.mean()), unit, noise / math.sqrt(count)),
        "minimum": Quantity(float(profile.min()), unit, noise),
        "maximum": Quantity(float(profile.max()), unit, noise),
        "length": Quantity(float(d[-1]), "mm", 0.0),
        "noise": Quantity(noise, unit, noise / math.sqrt(2 * plateaus.freedom)),
        "profile": Curve(d, profile, doubts, "distance", "mm", "value", unit),
        "sd": None if sd is None else Curve(d, sd, None, "distance", "mm", "SD", unit),
        "crossings": Curve(
            np.arange(1.0, len(at) + 1), at, noise / np.abs(slope), "crossing", "", "distance", "mm"
        ),
        "level": half if level is None else Quantity(level, unit, 0.0),
    }


def _shape(
    d: Floats, profile: Floats, plateaus: Ends, background: Ends, unit: str
) -> tuple[dict[str, Any], Quantity]:
    """Return what the profile shows, an edge or a peak, and half its height."""
    peak = peak_width(d, profile, background, unit)
    if isinstance(peak, Peak):
        base = (background.low + background.high) / 2
        doubt = math.hypot(peak.height.uncertainty or 0.0, background.doubt) / 2
        edge = NotMeasured("both ends of the profile are alike", "draw it across one edge")
        shape = {"fwhm": peak.width, "height": peak.height, "middle": peak.middle}
        return shape | {"edge_width": edge}, Quantity(base + peak.height.value / 2, unit, doubt)
    half = Quantity((plateaus.low + plateaus.high) / 2, unit, plateaus.doubt / math.sqrt(2))
    found = edge_width(d, profile, plateaus)
    middle: Quantity | NotMeasured = NotMeasured("the profile shows neither edge nor peak", _DRAW)
    if isinstance(found, Quantity):
        at, slope = crossings(d, profile, half.value)
        i = int(np.argmin(np.abs(at - np.median(at))))
        doubt = math.hypot(plateaus.noise, half.uncertainty or 0.0)
        middle = Quantity(float(at[i]), "mm", doubt / abs(float(slope[i])))
    return {"edge_width": found, "fwhm": peak, "height": peak, "middle": middle}, half


def _cautions(
    path: PathPoints, values: Floats, numbers: dict[str, Any], order: int, pixel: float
) -> list[Caution]:
    found = []
    if order == 1:
        found.append(
            Caution(
                "resampled-profile",
                "Values between pixels are interpolated linearly, which widens edges and peaks.",
                "Use cubic interpolation for widths.",
            )
        )
    width, middle = numbers["edge_width"] or numbers["fwhm"], numbers["middle"]
    if not isinstance(width, Quantity):
        return found
    # an edge reaches about its width to either side, a peak two pixels beyond its half height
    half = width.value if numbers["edge_width"] else width.value / 2 + 2 * pixel
    if isinstance(middle, Quantity) and _turns_within(path, middle.value, half):
        found.append(
            Caution(
                "turn-within-width",
                "The path turns within the edge or peak, so that its width is that of two"
                " directions.",
                "Draw the path so that one straight piece crosses the edge or peak.",
            )
        )
    if width.value < 2 * pixel:
        found.append(
            Caution(
                "coarse-sampling",
                f"The width is {width.value / pixel:.1f} pixels; at least 2 are needed.",
                "Reconstruct with smaller pixels, or measure the MTF of a slanted edge.",
            )
        )
    lean = _lean(path, values.mean(axis=0), numbers["level"].value, middle)
    across = abs(lean) * float(np.ptp(path.offset))
    # an average over a shift b adds b²/12 to the variance; 10-90 % is 2.56 sigma, FWHM 2.35
    wider = 100 * (across / (width.value / 2.45)) ** 2 / 24
    if wider > 1.0:
        found.append(
            Caution(
                "slanted-average",
                f"The edge leans by {math.degrees(math.atan(lean)):.1f}° against the profile's"
                f" normal; averaging across the width widens it by about {wider:.1f} %.",
                "Draw the profile at right angles to the edge, or less wide.",
            )
        )
    return found


def _turns_within(path: PathPoints, middle: float, half: float) -> bool:
    return bool((np.abs(path.corner - middle) < path.reach + half).any())


def _lean(path: PathPoints, lines: Floats, level: float, middle: Quantity | NotMeasured) -> float:
    """Return how far the crossing moves along the path a mm across it."""
    if len(lines) < 3 or not isinstance(middle, Quantity):
        return 0.0
    whole, _ = crossings(path.distance, lines.mean(axis=0), level)
    if not len(whole):
        return 0.0
    # one flank, the same in every line: a peak's middle lies as far from its other flank
    flank = float(whole[int(np.argmin(np.abs(whole - middle.value)))])
    offsets, places = [], []
    for offset, line in zip(path.offset, lines, strict=True):
        at, _ = crossings(path.distance, line, level)
        if len(at):
            offsets.append(float(offset))
            places.append(float(at[int(np.argmin(np.abs(at - flank)))]))
    if len(places) < 0.6 * len(lines) or np.ptp(offsets) == 0:
        return 0.0
    return float(np.polynomial.polynomial.polyfit(offsets, places, 1)[1])
