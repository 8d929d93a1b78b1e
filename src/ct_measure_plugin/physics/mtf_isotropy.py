"""Resolution by direction and by distance from the isocentre, from many edges, rods or wires."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.isotropy_fit import AT_CENTER, Fit, fit_places
from ct_measure_plugin.physics.results import Caution, Curve, NotMeasured, Quantity, Result

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["IsotropyPlace", "MtfIsotropy", "mtf_isotropy"]

#: Directions within so many degrees of the radius, or of its normal, are radial or azimuthal.
RADIAL_DEG = 30.0

#: An amplitude of so many standard uncertainties makes a direction stand out.
STANDS_OUT = 2.0


@dataclass(frozen=True, slots=True)
class IsotropyPlace:
    """f50 in one direction at one place.

    Attributes
    ----------
    name : str
        What people call the place.
    y, x : Quantity
        Where it lies, mm in the image frame.
    direction : Quantity
        Direction in which f50 was measured, degrees counter-clockwise on the screen from +x.
    distance : Quantity
        From the isocentre, mm.
    facing : Quantity
        Angle of the direction to the line from the isocentre: 0° radial, 90° azimuthal. Within
        1 mm of the isocentre there is no such line: 45°, uncertain by all that it could be.
    f50 : Quantity
        mm⁻¹.
    half_width_deg : float
        Half the range of directions that f50 is a mean over.
    """

    name: str
    y: Quantity
    x: Quantity
    direction: Quantity
    distance: Quantity
    facing: Quantity
    f50: Quantity
    half_width_deg: float = 0.0

    @classmethod
    def at(
        cls,
        place_mm: tuple[float, float],
        direction: Quantity,
        f50: Quantity,
        *,
        isocentre_mm: tuple[float, float] = (0.0, 0.0),
        doubt_mm: float = 0.0,
        half_width_deg: float = 0.0,
        name: str = "",
    ) -> IsotropyPlace:
        """Return a place with its distance from the isocentre and its angle to the radius.

        >>> one = IsotropyPlace.at((-30.0, 40.0), Quantity(36.87, "°", 0.0), Quantity(0.4, "mm⁻¹"))
        >>> one.distance.value, round(one.facing.value, 2)
        (50.0, 0.0)
        """
        down, right = (c - o for c, o in zip(place_mm, isocentre_mm, strict=True))
        r = math.hypot(down, right)
        facing = Quantity(45.0, "°", 90.0 / math.sqrt(12.0))
        if r > AT_CENTER:
            off = direction.value - math.degrees(math.atan2(-down, right))
            doubt = math.hypot(direction.uncertainty or 0.0, math.degrees(doubt_mm / r))
            facing = Quantity(abs((off + 90.0) % 180.0 - 90.0), "°", doubt)
        return cls(
            name=name,
            y=Quantity(place_mm[0], "mm", doubt_mm),
            x=Quantity(place_mm[1], "mm", doubt_mm),
            direction=direction,
            distance=Quantity(r, "mm", doubt_mm),
            facing=facing,
            f50=f50,
            half_width_deg=half_width_deg,
        )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MtfIsotropy(Result):
    """How far resolution depends on direction and place.

    Attributes
    ----------
    f50 : Quantity
        Weighted mean of all f50, mm⁻¹.
    scatter_ratio : Quantity
        Scatter of the f50 about their mean over what their uncertainties explain; 1 for a
        resolution that is the same in all directions and places.
    isotropy : Quantity or NotMeasured
        Lowest over highest f50 of all directions in the image, at the isocentre; at most 1.
    sharpest_direction : Quantity or NotMeasured
        Direction of the highest f50, degrees counter-clockwise on the screen from +x.
    center : Quantity or NotMeasured
        f50 at the isocentre, mean over directions.
    far, far_radial, far_azimuthal : Quantity or NotMeasured
        f50 at the largest distance measured: mean over directions, along the radius, and at right
        angles to it.
    largest_distance : Quantity
        mm.
    by_angle : Curve
        f50 over the direction: the fit where there is one, with what was measured as its data.
    by_distance : Curve
        f50 over the distance from the isocentre, as measured.
    radial, azimuthal : Curve or None
        The same of directions within 30° of the radius, and of its normal.
    places : tuple of IsotropyPlace
        What was measured where.
    """

    f50: Quantity
    scatter_ratio: Quantity
    isotropy: Quantity | NotMeasured
    sharpest_direction: Quantity | NotMeasured
    center: Quantity | NotMeasured
    far: Quantity | NotMeasured
    far_radial: Quantity | NotMeasured
    far_azimuthal: Quantity | NotMeasured
    largest_distance: Quantity
    by_angle: Curve
    by_distance: Curve
    radial: Curve | None
    azimuthal: Curve | None
    places: tuple[IsotropyPlace, ...]


def mtf_isotropy(
    places: Sequence[IsotropyPlace], *, cautions: Sequence[Caution] = ()
) -> MtfIsotropy | NotMeasured:
    """Combine f50 of several directions and places.

    Parameters
    ----------
    places : sequence of IsotropyPlace
        At least two; every f50 with an uncertainty greater than 0.
    cautions : sequence of Caution
        What is known of them; passed on.

    Returns
    -------
    MtfIsotropy or NotMeasured

    Raises
    ------
    ArgumentError
        If an f50 is not positive or has no uncertainty.

    Notes
    -----
    1 / f50² is fitted by weighted least squares: of a Gaussian blur with covariance S it is
    n·S·n / 0.187391² in the direction n, which is linear in cos 2φ and sin 2φ; and blur that
    grows in proportion to the distance r, as that of a turning gantry does across the radius, adds
    r². So 1 / f50² = A + B cos 2φ + C sin 2φ + r² (P + Q cos 2ψ), with φ the direction and ψ its
    angle to the radius. Terms that the places cannot tell apart (condition index over 30: Belsley,
    Kuh and Welsch 1980, Regression Diagnostics) are left out. A mean over φ ± β scales its cosine
    by sin 2β / 2β. Uncertainties grow with the scatter about the fit where that is larger than they
    explain.

    Examples
    --------
    >>> sigma = {0: 0.6, 45: math.hypot(0.6, 0.7) / math.sqrt(2), 90: 0.7}
    >>> ring = [
    ...     IsotropyPlace.at(
    ...         (0, 0), Quantity(angle, "°", 0.0), Quantity(0.187391 / s, "mm⁻¹", 0.0005)
    ...     )
    ...     for angle, s in sigma.items()
    ... ]
    >>> found = mtf_isotropy([*ring, ring[1]])
    >>> round(found.isotropy.value, 3), round(0.6 / 0.7, 3), found.sharpest_direction.value
    (0.857, 0.857, 0.0)
    """
    _checked(places)
    if len(places) < 2:
        return NotMeasured(
            f"f50 was measured at {len(places)} places; at least 2 are needed",
            "add regions in other directions or places",
        )
    f50 = np.array([one.f50.value for one in places])
    u = np.array([one.f50.uncertainty or 0.0 for one in places])
    direction = np.array([one.direction.value % 180.0 for one in places])
    distance = np.array([one.distance.value for one in places])
    facing = np.array([one.facing.value for one in places])
    wide = np.array([one.half_width_deg for one in places])
    fit = fit_places(f50, u, direction, distance, facing, wide)
    weights = u**-2
    mean = float(np.sum(weights * f50) / weights.sum())
    free = len(places) - 1
    ratio = math.sqrt(float(np.sum(weights * (f50 - mean) ** 2)) / free)
    doubt = max(ratio, 1.0) / math.sqrt(float(weights.sum()))
    farthest = int(np.argmax(distance))
    r = float(distance[farthest])
    return MtfIsotropy(
        f50=Quantity(mean, "mm⁻¹", doubt),
        scatter_ratio=Quantity(ratio, "", 1 / math.sqrt(2 * free)),
        isotropy=_isotropy(fit),
        sharpest_direction=_sharpest(fit),
        center=_at(fit, fit.level(0.0)) if fit.has_distance else _no_distance(),
        far=_at(fit, fit.level(r)) if fit.has_distance else _no_distance(),
        far_radial=_facing(fit, r, 0.0),
        far_azimuthal=_facing(fit, r, 90.0),
        largest_distance=Quantity(r, "mm", places[farthest].distance.uncertainty),
        by_angle=_by_angle(fit, direction, f50, u),
        by_distance=_points(distance, f50, u, np.ones(len(f50), dtype=bool)),
        radial=_some(distance, f50, u, facing <= RADIAL_DEG),
        azimuthal=_some(distance, f50, u, facing >= 90.0 - RADIAL_DEG),
        places=tuple(places),
        cautions=tuple(cautions),
    )


def _checked(places: Sequence[IsotropyPlace]) -> None:
    for one in places:
        if not one.f50.value > 0:
            raise ArgumentError("f50", "must be greater than 0", one.f50.value)
        if not one.f50.uncertainty:
            raise ArgumentError("f50", "must have an uncertainty", one.f50.uncertainty)
        if not 0 <= one.half_width_deg <= 90:
            raise ArgumentError("half_width_deg", "must lie within 0 to 90", one.half_width_deg)


def _no_distance() -> NotMeasured:
    return NotMeasured(
        "the places do not tell how f50 depends on the distance from the isocentre",
        "add places nearer to the isocentre, and farther from it, in several directions",
    )


def _no_direction() -> NotMeasured:
    return NotMeasured(
        "the places do not tell how f50 depends on the direction",
        "add edges in at least three directions, well apart, or measure round edges",
    )


def _at(fit: Fit, row: Floats) -> Quantity | NotMeasured:
    """Return f50 where the fit has a row of columns."""
    value = float(row @ fit.mix)
    if not value > 0:
        return NotMeasured("the fit has no f50 there", "add places near it")
    spread = math.sqrt(max(float(row @ fit.covariance @ row), 0.0))
    return Quantity(value**-0.5, "mm⁻¹", 0.5 * spread * value**-1.5)


def _facing(fit: Fit, r: float, facing: float) -> Quantity | NotMeasured:
    if not fit.has_facing:
        return _no_distance()
    return _at(fit, fit.level(r, facing))


def _isotropy(fit: Fit) -> Quantity | NotMeasured:
    if not fit.has_direction:
        return _no_direction()
    level, (size, along, cov) = float(fit.mix[0]), _amplitude(fit)
    across = np.array([0.0, -along[1], along[0]])
    # an amplitude in noise reads high: its square by the variance across it
    true = math.sqrt(max(size**2 - float(across @ cov @ across), 0.0))
    if not level > true:
        return NotMeasured("the fit has no f50 in some directions", "add places")
    # of the ratio ((A - a) / (A + a))^(1/2), by A and by the amplitude a
    ratio = math.sqrt((level - true) / (level + true))
    slope = ratio / (level**2 - true**2)
    rows = np.array([slope * true, *(-slope * level * along)])
    return Quantity(ratio, "", math.sqrt(max(float(rows @ cov @ rows), 0.0)))


def _amplitude(fit: Fit) -> tuple[float, Floats, Floats]:
    """Return the size of (B, C), its direction, and the covariance of A, B and C."""
    size = math.hypot(*fit.mix[1:3])
    along: Floats = fit.mix[1:3] / size if size > 0 else np.array([1.0, 0.0])
    return size, along, fit.covariance[:3, :3]


def _sharpest(fit: Fit) -> Quantity | NotMeasured:
    if not fit.has_direction:
        return _no_direction()
    size, along, cov = _amplitude(fit)
    across = np.array([0.0, -along[1], along[0]])
    spread = math.sqrt(max(float(across @ cov @ across), 0.0))
    if size <= STANDS_OUT * max(spread, math.sqrt(float(np.trace(cov[1:, 1:])) / 2)):
        return NotMeasured(
            "no direction stands out from the uncertainties", "none is needed, or add places"
        )
    # 1 / f50² is least where the cosine is at its lowest
    angle = (math.degrees(math.atan2(-along[1], -along[0])) / 2) % 180.0
    return Quantity(angle, "°", math.degrees(spread / size) / 2)


def _by_angle(fit: Fit, direction: Floats, f50: Floats, u: Floats) -> Curve:
    order = np.argsort(direction, kind="stable")
    names = ("direction", "°", "f50", "mm⁻¹")
    points = Curve(direction[order], f50[order], u[order], *names, joined=False)
    if not fit.has_direction:
        return points
    x = np.linspace(0.0, 180.0, 91)
    rows = fit.ring(x)
    value = rows @ fit.mix
    if not (value > 0).all():
        return points
    spread = np.sqrt(np.maximum(np.einsum("ij,jk,ik->i", rows, fit.covariance, rows), 0.0))
    return Curve(x, value**-0.5, 0.5 * spread * value**-1.5, *names, data=points)


def _points(distance: Floats, f50: Floats, u: Floats, kept: NDArray[np.bool_]) -> Curve:
    order = np.flatnonzero(kept)[np.argsort(distance[kept], kind="stable")]
    return Curve(
        *(distance[order], f50[order], u[order]),
        *("distance from the isocentre", "mm", "f50", "mm⁻¹"),
        joined=False,
    )


def _some(distance: Floats, f50: Floats, u: Floats, kept: NDArray[np.bool_]) -> Curve | None:
    return _points(distance, f50, u, kept) if kept.any() else None
