"""Where a circular edge lies in an image: centre, radius, and how round it is."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import ndimage
from skimage import filters, measure

from ct_measure_plugin.physics.edge_bins import bin_by_distance
from ct_measure_plugin.physics.edge_line import RoughEsf, pixel_grid, rough_esf
from ct_measure_plugin.physics.results import NotMeasured

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = [
    "Annulus",
    "EdgeCircle",
    "annulus_about",
    "circle_jacobian",
    "locate_circle",
    "rough_circle",
]

#: Steps of the search, and the change in pixels at which it ends.
MOST_STEPS, SMALL_STEP = 10, 2e-4

#: The annulus reaches this many FWHM to either side, but at least this many mm.
REACH_FWHM, REACH_MM = 6.0, 5.0


@dataclass(frozen=True, slots=True, eq=False)
class Annulus:
    """Pixels around a circle.

    Attributes
    ----------
    center : (float, float)
        y and x from the middle of the image, mm.
    radius : float
        mm.
    harmonic : (float, float)
        Amplitudes in mm of cos 2φ and sin 2φ in the radius: how oval the circle is.
    distance, azimuth : ndarray, shape (ny, nx)
        Distance inwards from the edge, mm, and direction φ from the centre, radians from +x
        towards +y.
    used : ndarray of bool, shape (ny, nx)
        Pixels that belong to this edge.
    """

    center: tuple[float, float]
    radius: float
    harmonic: tuple[float, float]
    distance: Floats
    azimuth: Floats
    used: NDArray[np.bool_]


@dataclass(frozen=True, slots=True, eq=False)
class EdgeCircle:
    """A circular edge that was found.

    Attributes
    ----------
    annulus : Annulus
        The circle and the pixels about it.
    rough : RoughEsf
        Shape of the edge, over the distance inwards.
    sigma : float
        Width of the best Gaussian edge, mm.
    residual : ndarray, shape (ny, nx)
        Pixels minus the rough edge; 0 outside the annulus.
    jacobian : ndarray, shape (6, ny, nx)
        Derivatives by radius and centre (y, x), and by level, slope and step of the edge.
    """

    annulus: Annulus
    rough: RoughEsf
    sigma: float
    residual: Floats
    jacobian: Floats


def annulus_about(
    y: Floats,
    x: Floats,
    center: tuple[float, float],
    radius: float,
    harmonic: tuple[float, float],
    reach: tuple[float, float],
) -> Annulus:
    """Return the pixels from reach[0] outside to reach[1] inside a slightly oval circle."""
    down, right = y - center[0], x - center[1]
    azimuth = np.arctan2(down, right)
    d = radius - np.hypot(down, right)
    d += harmonic[0] * np.cos(2 * azimuth) + harmonic[1] * np.sin(2 * azimuth)
    return Annulus(center, radius, harmonic, d, azimuth, (d >= -reach[0]) & (d <= reach[1]))


@dataclass(slots=True)
class _Search:
    """The state of the search."""

    y: Floats
    x: Floats
    pixel: float
    center: tuple[float, float]
    radius: float
    outer: float
    inner: float
    harmonic: tuple[float, float] = (0.0, 0.0)

    def annulus(self, reach: float = math.inf) -> Annulus:
        wide = min(self.outer, reach), min(self.inner, reach)
        return annulus_about(self.y, self.x, self.center, self.radius, self.harmonic, wide)

    def moved(self, change: Floats) -> bool:
        """Apply a change of radius, centre and harmonic; False if the circle left the image."""
        change = np.clip(change, -self.radius / 4, self.radius / 4)
        self.radius += float(change[0])
        self.center = self.center[0] + float(change[1]), self.center[1] + float(change[2])
        self.harmonic = self.harmonic[0] + float(change[3]), self.harmonic[1] + float(change[4])
        inside = abs(self.center[0]) < self.y[-1, 0] and abs(self.center[1]) < self.x[0, -1]
        return self.radius > 0 and bool(inside)


def locate_circle(image: Floats, spacing_mm: tuple[float, float]) -> EdgeCircle | NotMeasured:
    """Return the circular edge nearest to the middle of an image.

    Notes
    -----
    Start: Otsu's threshold (1979, IEEE Trans. SMC 9:62) on the smoothed image, the connected
    object nearest the middle, its centroid and area. Then Gauss-Newton steps on centre, radius
    and second harmonic with the edge spread function fitted anew in each.
    """
    search = _start(image, spacing_mm)
    if isinstance(search, NotMeasured):
        return search
    lost = NotMeasured("no circular edge was found", "draw the box around one rod")
    annulus = search.annulus()
    rough = rough_circle(image, annulus, search.pixel)
    if rough is None:
        return NotMeasured("the circle is too small to be measured", "use smaller pixels")
    for step in range(MOST_STEPS):
        near = annulus.used & (np.abs(annulus.distance) <= 5 * rough.sigma)
        phi = annulus.azimuth[near]
        columns = rough.line_at(annulus.distance[near]) * np.stack(
            [np.ones_like(phi), np.sin(phi), np.cos(phi), np.cos(2 * phi), np.sin(2 * phi)]
        )
        normal = columns @ columns.T
        if not np.linalg.cond(normal) < 1e12:
            return lost
        left = image[near] - rough.at(annulus.distance[near])
        change = np.linalg.solve(normal, columns @ left)
        if step >= 3 and float(np.abs(change).max()) < SMALL_STEP * search.pixel:
            break
        if not search.moved(change):
            return lost
        reach = max(REACH_FWHM * 2.3548 * rough.sigma, REACH_MM) if step > 1 else math.inf
        annulus = search.annulus(reach)
        found = rough_circle(
            image, annulus, search.pixel, rough, terms=0 if step < 1 else 3, wide=step < 4
        )
        if found is None:
            return lost
        rough = found
    return _circle(image, annulus, rough, search.pixel)


def rough_circle(
    image: Floats,
    annulus: Annulus,
    pixel: float,
    before: RoughEsf | None = None,
    *,
    terms: int = 0,
    wide: bool = True,
) -> RoughEsf | None:
    """Return the rough edge spread function around a circle, or None if there are too few pixels.

    `image` may hold several slices, shape (nz, ny, nx), on one circle.
    """
    used = annulus.used
    width = pixel / 2 if before is None else max(pixel / 4, before.sigma / 6)
    d = annulus.distance[used]
    if len(d) < 12:
        return None
    bins = bin_by_distance(d, image[used], width, half=float(np.abs(d).max()))
    if len(bins.index) < 12:
        return None
    return rough_esf(bins, None if before is None else before.sigma, terms=terms, wide=wide)


def _circle(image: Floats, annulus: Annulus, rough: RoughEsf, pixel: float) -> EdgeCircle:
    gauss = rough_circle(image, annulus, pixel, rough, terms=0)
    if gauss is not None and not 0.7 < gauss.sigma / rough.sigma < 1.4:
        # with Hermite terms a much wider Gaussian may fit: the search begins anew from the end
        gauss = rough_circle(image, annulus, pixel, gauss, terms=0)
    if gauss is not None and rough.sigma > 1.6 * gauss.sigma:
        # Hermite terms on a much wider Gaussian take the far side of a small disc for a tail
        rough = rough_circle(image, annulus, pixel, gauss, terms=3) or rough
    return EdgeCircle(
        annulus,
        rough,
        rough.sigma if gauss is None else gauss.sigma,
        np.where(annulus.used, image - rough.at(annulus.distance), 0.0),
        circle_jacobian(annulus, rough),
    )


def circle_jacobian(annulus: Annulus, rough: RoughEsf) -> Floats:
    """Return the derivatives of :attr:`EdgeCircle.jacobian`."""
    d, phi = annulus.distance, annulus.azimuth
    line = rough.line_at(d)
    columns = [line, line * np.sin(phi), line * np.cos(phi), np.ones_like(d), d, rough.at(d)]
    found: Floats = np.stack(columns) * annulus.used
    return found


def _start(image: Floats, spacing_mm: tuple[float, float]) -> _Search | NotMeasured:
    """Return the search about the object nearest the middle of the image."""
    smooth = ndimage.gaussian_filter(image, max(1.0, min(image.shape) / 48), mode="nearest")
    border = np.concatenate([smooth[0], smooth[-1], smooth[:, 0], smooth[:, -1]])
    if float(np.median(border)) > float(filters.threshold_otsu(smooth)):
        smooth = -smooth  # the same search for dark rods as for bright ones
    above = smooth > float(filters.threshold_otsu(smooth))
    dy, dx = spacing_mm
    y, x = pixel_grid((image.shape[0], image.shape[1]), spacing_mm)
    best: tuple[float, float, float, float] | None = None
    for part in measure.regionprops(measure.label(above)):
        if part.area < 20:
            continue
        cy = float(part.centroid[0]) * dy + float(y[0, 0])
        cx = float(part.centroid[1]) * dx + float(x[0, 0])
        radius = math.sqrt(float(part.area) * dy * dx / math.pi)
        merit = math.hypot(cy, cx) - radius  # how far the middle of the box lies outside it
        best = min(best or (math.inf, 0.0, 0.0, 0.0), (merit, cy, cx, radius))
    if best is None:
        return NotMeasured("no disc was found in the box", "draw the box around one rod")
    _, cy, cx, radius = best
    room = min(float(y[-1, 0]) - abs(cy), float(x[0, -1]) - abs(cx)) - radius
    pixel = max(spacing_mm)
    if min(room, radius) < 3 * pixel:
        return NotMeasured(
            "the circle reaches the border of the box", "draw the box larger, around the rod"
        )
    return _Search(y, x, pixel, (cy, cx), radius, min(room, radius), 0.9 * radius)
