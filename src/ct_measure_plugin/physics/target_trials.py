"""A promising place, measured once: a target with its figures, or why it would not do."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Literal

import numpy as np

from ct_measure_plugin.physics.clear_space import pixel_box
from ct_measure_plugin.physics.disc_mtf import DiscMtf, disc_mtf
from ct_measure_plugin.physics.edge_mtf import EdgeMtf, edge_mtf
from ct_measure_plugin.physics.regions import Box, Disc
from ct_measure_plugin.physics.results import Caution, NotMeasured, Quantity
from ct_measure_plugin.physics.wire_mtf import WireMtf, wire_mtf

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.physics.bright_spots import Spot

    Floats = NDArray[np.float64]

__all__ = ["MEASURED_BY", "Kind", "Scene", "Target", "Trial", "Unsuitable", "try_out"]

Kind = Literal["edge", "rod", "wire"]

#: What measures each kind.
MEASURED_BY: dict[Kind, str] = {"edge": "edge_mtf", "rod": "disc_mtf", "wire": "wire_mtf"}

#: Relative uncertainty of f50 beyond which a target measures, but not well.
MOST_UNSURE = 0.1

#: A spot whose f50 is less than this share of what the edges of the slice have is no wire.
LEAST_F50 = 0.7


@dataclass(frozen=True, slots=True)
class Target:
    """Something from which an MTF can be measured, and the box to measure it in.

    Attributes
    ----------
    kind : {"edge", "rod", "wire"}
        A straight edge, a round one, or a wire or bead.
    region : Box or Disc
        Where to measure, named after the kind and its number.
    contrast : Quantity
        Step of the edge, rod less surroundings, or height of the spot.
    contrast_to_noise : Quantity or NotMeasured
        That over the noise of single pixels.
    angle : Quantity or None
        Of an edge: its lean from the nearer pixel axis, degrees.
    radius : Quantity or None
        Of a rod, mm.
    width : Quantity or None
        Full width at half maximum of the line or point spread function, mm.
    f50, f10 : Quantity or NotMeasured
        What the box gave when it was tried on this slice; f50 was always measured.
    cautions : tuple of Caution
        What the trial cautioned of.
    """

    kind: Kind
    region: Box | Disc
    contrast: Quantity
    contrast_to_noise: Quantity | NotMeasured
    angle: Quantity | None
    radius: Quantity | None
    width: Quantity | None
    f50: Quantity
    f10: Quantity | NotMeasured
    cautions: tuple[Caution, ...] = field(default=(), compare=False)

    @property
    def measurement(self) -> str:
        """Name of the measurement that takes the region."""
        return MEASURED_BY[self.kind]

    @property
    def doubt(self) -> float:
        """Relative standard uncertainty of f50: the order of merit, the least first."""
        return (self.f50.uncertainty or 0.0) / self.f50.value


@dataclass(frozen=True, slots=True)
class Unsuitable:
    """Something that was found and would not do.

    Attributes
    ----------
    kind : {"edge", "rod", "wire"}
        What it looks like.
    center_mm : (float, float)
        y and x of its middle.
    size_mm : float
        Length of an edge, diameter of a rod, full width at half maximum of a spot.
    why : NotMeasured
        Reason and remedy.
    """

    kind: Kind
    center_mm: tuple[float, float]
    size_mm: float
    why: NotMeasured


@dataclass(frozen=True, slots=True, eq=False)
class Scene:
    """The slice.

    Attributes
    ----------
    image : ndarray, shape (ny, nx)
        CT numbers.
    spacing_mm, origin_mm : (float, float)
        dy, dx, and y, x of the centre of pixel (0, 0) in the image frame.
    z_mm : float or None
        Where the slice lies.
    unit : str
        Of the values.
    limits : (float, float) or None
        Lowest and highest value that the encoding can hold.
    """

    image: Floats
    spacing_mm: tuple[float, float]
    origin_mm: tuple[float, float]
    z_mm: float | None
    unit: str
    limits: tuple[float, float] | None

    @property
    def pixel(self) -> float:
        """The larger pixel spacing, mm."""
        return max(self.spacing_mm)

    def rounded(self, length: float) -> float:
        """Return a length to a small part of a pixel, as it can be written down."""
        return 0.0 + round(length, 2 + max(0, -math.floor(math.log10(self.pixel))))


@dataclass(frozen=True, slots=True)
class Trial:
    """A candidate with its box.

    Attributes
    ----------
    kind : {"edge", "rod", "wire"}
        What it looks like.
    center_mm, half_mm : (float, float)
        Middle and half sides of the box, from the centre of pixel (0, 0).
    place_mm, size_mm :
        As those of :class:`Unsuitable`, in the slice's own frame.
    doubt : float
        The least relative uncertainty that noise would allow.
    width_mm : float
        Full width at half maximum of its blur.
    spot : Spot or None
        A wire's spot.
    """

    kind: Kind
    center_mm: tuple[float, float]
    half_mm: tuple[float, float]
    place_mm: tuple[float, float]
    size_mm: float
    doubt: float
    width_mm: float
    spot: Spot | None = None

    def refused(self, scene: Scene, reason: str, remedy: str) -> Unsuitable:
        """Return that it would not do."""
        place = tuple(c + o for c, o in zip(self.place_mm, scene.origin_mm, strict=True))
        why = NotMeasured(reason, remedy)
        return Unsuitable(self.kind, (place[0], place[1]), self.size_mm, why)


def try_out(scene: Scene, trial: Trial, others: Sequence[Target]) -> Target | Unsuitable:
    """Measure a candidate on its slice.

    Parameters
    ----------
    scene : Scene
        The slice.
    trial : Trial
        The candidate.
    others : sequence of Target
        What was measured before: a spot much less sharp than the edges and rods is refused.
    """
    region = _region(scene, trial)
    found = _measured(scene, trial.kind, region)
    if isinstance(found, NotMeasured):
        return trial.refused(scene, found.reason, found.remedy)
    if not isinstance(found.f50, Quantity):
        return trial.refused(scene, found.f50.reason, found.f50.remedy)
    unsure = (found.f50.uncertainty or 0.0) / found.f50.value
    if unsure > MOST_UNSURE:
        return trial.refused(
            scene,
            f"noise leaves its f50 uncertain by {100 * unsure:.0f} %",
            "measure several slices together, or a stronger contrast",
        )
    sharp = [one.f50.value for one in others if one.kind != "wire"]
    usual = float(np.median(sharp)) if sharp else 0.0
    low = found.f50.value + 2 * (found.f50.uncertainty or 0.0)
    if trial.kind == "wire" and low < LEAST_F50 * usual:
        return trial.refused(
            scene,
            f"its f50, {found.f50.value:.2g} mm⁻¹, is far below the {usual:.2g} mm⁻¹ of this"
            " slice's edges: a small rod rather than a wire",
            "measure a thinner wire, or a rod that is thicker than ten times the blur",
        )
    contrast, ratio = _contrast(scene, trial, found)
    return Target(
        kind=trial.kind,
        region=region,
        contrast=contrast,
        contrast_to_noise=ratio,
        angle=found.angle if isinstance(found, EdgeMtf) else None,
        radius=found.radius if isinstance(found, DiscMtf) else None,
        width=found.width if isinstance(found.width, Quantity) else None,
        f50=found.f50,
        f10=found.f10,
        cautions=found.cautions,
    )


def _contrast(
    scene: Scene, trial: Trial, found: EdgeMtf | DiscMtf | WireMtf
) -> tuple[Quantity, Quantity | NotMeasured]:
    if trial.spot is not None:
        return trial.spot.over_surroundings(math.prod(scene.spacing_mm), scene.unit)
    assert not isinstance(found, WireMtf)  # noqa: S101 - wires are tried from spots
    return found.contrast, found.contrast_to_noise


def _region(scene: Scene, trial: Trial) -> Box | Disc:
    """Return the region, its numbers rounded so that they can be written down."""
    y, x = (scene.rounded(c + o) for c, o in zip(trial.center_mm, scene.origin_mm, strict=True))
    height, width = (2 * scene.rounded(half) for half in trial.half_mm)
    if trial.kind == "rod":
        return Disc((y, x), height / 2, z_mm=scene.z_mm)
    return Box((y, x), (height, width), z_mm=scene.z_mm)


def _measured(
    scene: Scene, kind: Kind, region: Box | Disc
) -> EdgeMtf | DiscMtf | WireMtf | NotMeasured:
    if isinstance(region, Disc):
        half = (region.radius_mm, region.radius_mm)
    else:
        half = (region.size_mm[0] / 2, region.size_mm[1] / 2)
    y, x = (c - o for c, o in zip(region.center_mm, scene.origin_mm, strict=True))
    box = pixel_box(scene.image.shape, scene.spacing_mm, (y, x), half)
    if box is None:
        return NotMeasured("its box leaves the image", "reconstruct a larger field of view")
    pixels, steps = box.of(scene.image), scene.spacing_mm
    if kind == "edge":
        return edge_mtf(pixels, spacing_mm=steps, unit=scene.unit, limits=scene.limits)
    if kind == "rod":
        return disc_mtf(pixels, spacing_mm=steps, unit=scene.unit, limits=scene.limits)
    return wire_mtf(pixels, spacing_mm=steps, unit=scene.unit, limits=scene.limits)
