"""One rod through many slices: its circles on a straight axis, found from all slices at once."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.edge_bins import bin_by_distance
from ct_measure_plugin.physics.edge_circle import (
    Annulus,
    EdgeCircle,
    annulus_about,
    circle_jacobian,
    locate_circle,
)
from ct_measure_plugin.physics.edge_line import pixel_grid, rough_esf
from ct_measure_plugin.physics.edge_noise import (
    NoiseSpectrum,
    independent_slices,
    residual_spectrum,
)
from ct_measure_plugin.physics.results import NotMeasured

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.edge_line import RoughEsf

    Floats = NDArray[np.float64]

__all__ = ["CircleStack", "locate_stack"]

#: Slices whose contrast differs from the median's by more than this do not show the same rod.
MOST_CONTRAST_CHANGE = 0.2


@dataclass(frozen=True, slots=True, eq=False)
class CircleStack:
    """A rod's circular edge in one or many slices.

    Attributes
    ----------
    circles : tuple of EdgeCircle
        One a slice, all of one radius, with centres on a straight line.
    shift, shift_doubt : float
        How far the centre moves from slice to slice, mm, and its standard uncertainty.
    """

    circles: tuple[EdgeCircle, ...]
    shift: float = 0.0
    shift_doubt: float = 0.0

    @property
    def sigma(self) -> float:
        """Width of the best Gaussian edge, mm."""
        return float(np.median([c.sigma for c in self.circles]))

    @property
    def middle(self) -> EdgeCircle:
        """The circle of the middle slice."""
        return self.circles[len(self.circles) // 2]

    @property
    def noise(self) -> float:
        """SD of the pixels about the edge."""
        return math.sqrt(
            float(np.mean([np.mean(c.residual[c.annulus.used] ** 2) for c in self.circles]))
        )

    def spectrum(self, spacing_mm: tuple[float, float]) -> NoiseSpectrum:
        """Return the noise power spectrum of the pixels about the edge."""
        parts = [
            residual_spectrum(c.residual, spacing_mm, c.annulus.used.astype(float))
            for c in self.circles
        ]
        power = np.mean([p.power for p in parts], axis=0)
        return NoiseSpectrum(parts[0].frequency, power, spacing_mm)

    def independent(self) -> float:
        """Return how many independent slices these are worth, from their residuals."""
        return independent_slices(np.array([c.residual for c in self.circles]))


def locate_stack(stack: Floats, spacing_mm: tuple[float, float]) -> CircleStack | NotMeasured:
    """Return the circular edge in slices, shape (nz, ny, nx), that one straight rod makes.

    Notes
    -----
    The start is each slice's own circle or, where noise hides it, that of the slices' mean. Then
    all slices are projected on the derivatives of one common edge, which gives every slice's shift
    however noisy it is; a straight line through them moves the axis. Three such steps.
    """
    if len(stack) == 1:
        one = locate_circle(stack[0], spacing_mm)
        return one if isinstance(one, NotMeasured) else CircleStack((one,))
    start = _start(stack, spacing_mm)
    if isinstance(start, NotMeasured):
        return start
    model, centers = start
    index = np.arange(len(stack)) - (len(stack) - 1) / 2
    y, x = pixel_grid((stack.shape[1], stack.shape[2]), spacing_mm)
    slope, left = np.zeros(2), np.zeros_like(centers)
    radius, annuli = model.annulus.radius, []
    harmonic = np.array(model.annulus.harmonic)
    inner = model.annulus.distance[model.annulus.used]
    reach = -float(inner.min()), float(inner.max())
    contrast = np.ones(len(stack))
    for step in range(4):
        slope = index @ centers / float(index @ index)
        line = centers.mean(axis=0) + index[:, None] * slope
        oval = float(harmonic[0]), float(harmonic[1])
        annuli = [
            annulus_about(y, x, (float(c[0]), float(c[1])), radius, oval, reach) for c in line
        ]
        model = _pooled(stack, annuli, model, max(spacing_mm), terms=0 if step < 1 else 3)
        changes = np.array(
            [_projected(p, a, model.rough) for p, a in zip(stack, annuli, strict=True)]
        )
        contrast, change = changes[:, 0], changes[:, 1:4]
        harmonic = harmonic + changes[:, 4:].mean(axis=0)
        left = change[:, 1:] - change[:, 1:].mean(axis=0)
        radius += float(change[:, 0].mean())
        centers = line + change[:, 1:]
    off = np.abs(contrast - np.median(contrast))
    worst = int(np.argmax(off))
    if off[worst] > MOST_CONTRAST_CHANGE + 4 * 1.4826 * float(np.median(off)):
        return NotMeasured(
            f"slice {worst + 1} of {len(stack)} shows {100 * contrast[worst]:.0f} % of the contrast"
            " of the others: they do not hold the same rod",
            "choose only slices on which the rod is alike",
        )
    left = left - index[:, None] * (index @ left / float(index @ index))
    spread = math.sqrt(float(np.sum(left**2)) / max(2 * len(stack) - 4, 1))
    return CircleStack(
        tuple(_as_circle(p, a, model) for p, a in zip(stack, annuli, strict=True)),
        float(np.hypot(*slope)),
        spread / math.sqrt(float(index @ index)),
    )


def _start(
    stack: Floats, spacing_mm: tuple[float, float]
) -> tuple[EdgeCircle, Floats] | NotMeasured:
    """Return a model circle and every slice's centre, shape (nz, 2)."""
    found = [locate_circle(plane, spacing_mm) for plane in stack]
    good = [c for c in found if not isinstance(c, NotMeasured)]
    mean = locate_circle(stack.mean(axis=0), spacing_mm)
    if len(good) == len(found):
        centers = np.array([c.annulus.center for c in good])
        radii = np.array([c.annulus.radius for c in good])
        # centres of noisy circles scatter; they are believed if the radii agree
        if np.ptp(radii) < 0.3 * np.median(radii):
            model = sorted(good, key=lambda c: c.annulus.radius)[len(good) // 2]
            if isinstance(mean, NotMeasured) or _moves(centers, model.sigma):
                return model, centers
    if isinstance(mean, NotMeasured):
        return mean
    return mean, np.tile(mean.annulus.center, (len(stack), 1))


def _moves(centers: Floats, sigma: float) -> bool:
    """Tell whether the centres leave the mean image's circle visibly blurred."""
    index = np.arange(len(centers)) - (len(centers) - 1) / 2
    slope = index @ centers / float(index @ index)
    return float(np.hypot(*slope)) * len(centers) > 0.5 * sigma


def _pooled(
    stack: Floats, annuli: list[Annulus], model: EdgeCircle, pixel: float, *, terms: int
) -> EdgeCircle:
    """Return the model with the edge that all slices make together."""
    d = np.concatenate([a.distance[a.used] for a in annuli])
    v = np.concatenate([p[a.used] for p, a in zip(stack, annuli, strict=True)])
    width = max(pixel / 4, model.sigma / 6)
    bins = bin_by_distance(d, v, width, half=float(np.abs(d).max()))
    gauss = rough_esf(bins, model.sigma, terms=0)
    rough = gauss if terms == 0 else rough_esf(bins, gauss.sigma, terms=terms)
    return replace(model, rough=rough, sigma=gauss.sigma)


def _projected(plane: Floats, annulus: Annulus, rough: RoughEsf) -> Floats:
    """Return contrast, changes of radius and centre (y, x), and second harmonic of one slice."""
    used = annulus.used
    d, phi = annulus.distance[used], annulus.azimuth[used]
    line = rough.line_at(d)
    shape = rough.at(d)
    around = [line * turn for turn in (np.sin(phi), np.cos(phi), np.cos(2 * phi), np.sin(2 * phi))]
    columns = np.stack([np.ones_like(d), shape - shape.mean(), line, *around])
    found: Floats = np.linalg.lstsq(columns.T, plane[used], rcond=None)[0][1:]
    found[1:] /= found[0] if abs(found[0]) > 0.2 else 1.0
    return found


def _as_circle(plane: Floats, annulus: Annulus, model: EdgeCircle) -> EdgeCircle:
    left = plane - model.rough.at(annulus.distance)
    return replace(
        model,
        annulus=annulus,
        residual=np.where(annulus.used, left, 0.0),
        jacobian=circle_jacobian(annulus, model.rough),
    )
