"""The circle that a round object's edge draws in one image."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import ndimage, optimize
from skimage import filters

from ct_measure_plugin.physics.results import NotMeasured

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["Circle", "find_circle"]

RAYS = 360
#: Rays are gathered into so many blocks; the blocks' means scatter independently.
BLOCKS = 36
#: Of the rays, at least this share must meet an edge within a pixel of the circle.
VALID_SHARE = 0.7
#: Largest difference of the longest and shortest radius, as a share of the radius.
MOST_ELLIPTIC = 0.02
#: Smallest radius in pixels.
LEAST_PIXELS = 12.0
#: Scale beyond which a ray counts as an outlier in the fit, in pixels.
SOFT = 0.3
#: Stops of the fit, as near to rounding as it gets.
CLOSE = 1e-14

REMEDY = "show slices through a round object of one material that lies wholly in the image"


@dataclass(frozen=True, slots=True)
class Circle:
    """A circle in an image.

    Attributes
    ----------
    center_mm : (float, float)
        y and x from the centre of pixel (0, 0).
    radius_mm : float
        At the half level between inside and outside.
    doubt_mm : float
        Standard uncertainty of the radius; that of each coordinate of the centre is √2 of it.
    ellipticity : float
        Longest minus shortest radius, over the radius.
    inside, outside : float
        Levels on either side of the edge.
    """

    center_mm: tuple[float, float]
    radius_mm: float
    doubt_mm: float
    ellipticity: float
    inside: float
    outside: float


def find_circle(
    image: NDArray[np.generic], spacing_mm: tuple[float, float]
) -> Circle | NotMeasured:
    """Return the circle that the edge of the largest object in an image draws.

    Parameters
    ----------
    image : ndarray, shape (ny, nx)
        Values.
    spacing_mm : (float, float)
        dy and dx.

    Returns
    -------
    Circle or NotMeasured
        NotMeasured if the object is not round, or reaches out of the image.

    Notes
    -----
    Otsu's threshold (IEEE Trans. Syst. Man Cybern. 9 (1979) 62) gives the object; 360 rays from
    its centre are followed to the outermost crossing of the half level, and the circle is fitted
    to them with a soft L1 loss, so that a table that touches the object does not pull it. The
    half level lies inside the true edge by σ²/2R for a blur of σ: 0.003 mm for 0.7 mm and 85 mm.

    Examples
    --------
    >>> y, x = np.mgrid[:64, :64]
    >>> r = np.hypot(y - 30.2, x - 33.7)
    >>> found = find_circle(1000 / (1 + np.exp(2 * (r - 20.5))), (1.0, 1.0))
    >>> [round(c, 2) for c in found.center_mm], round(found.radius_mm, 2)
    ([30.2, 33.7], 20.5)
    """
    values = np.asarray(image, dtype=float)
    finite = np.isfinite(values)
    if not finite.any():
        return NotMeasured("the image holds no finite value", REMEDY)
    if not finite.all():
        values = np.where(finite, values, values[finite].min())
    start = _start(values, spacing_mm)
    if isinstance(start, NotMeasured):
        return start
    center, radius = start
    pixel = max(spacing_mm)
    reach = max(0.1 * radius, 5.0 * pixel)
    for _ in range(3):
        inside, outside = _levels(values, spacing_mm, center, radius, reach)
        angle, edge = _rays(values, spacing_mm, center, radius, reach, (inside + outside) / 2)
        if len(angle) < VALID_SHARE * RAYS:
            return NotMeasured(
                f"only {100 * len(angle) / RAYS:.0f} % of the rays from the object's middle meet a"
                f" circle's edge; {100 * VALID_SHARE:.0f} % are needed",
                REMEDY,
            )
        points = np.stack([center[0] - edge * np.sin(angle), center[1] + edge * np.cos(angle)])
        center, radius = _fit(points, center, radius, SOFT * pixel)
        reach = max(0.03 * radius, 5.0 * pixel)
    return _judged(points, center, radius, pixel, (inside, outside))


def _start(
    values: Floats, spacing_mm: tuple[float, float]
) -> tuple[tuple[float, float], float] | NotMeasured:
    """Return centre and radius of a disc of the largest object's area."""
    stride = max(1, min(values.shape) // 128)
    small = values[::stride, ::stride]
    allowed = np.ones(small.shape, dtype=bool)
    for _ in range(3):  # a filled circle of reconstruction is an object that holds another
        part = small[allowed]
        if part.min() == part.max():
            break
        bright = (small > filters.threshold_otsu(part)) & allowed
        found = _largest(bright)
        if found is None:
            break
        rows, columns = np.flatnonzero(found.any(axis=1)), np.flatnonzero(found.any(axis=0))
        span = (len(rows) / small.shape[0], len(columns) / small.shape[1])
        if min(span) < 0.97:
            area = float(found.sum()) * stride**2 * spacing_mm[0] * spacing_mm[1]
            radius = math.sqrt(area / math.pi)
            if radius < LEAST_PIXELS * max(spacing_mm):
                break
            cy, cx = (float(c) * stride for c in ndimage.center_of_mass(found))
            return (cy * spacing_mm[0], cx * spacing_mm[1]), radius
        allowed &= found
    return NotMeasured("no round object stands out from its surroundings", REMEDY)


def _largest(bright: NDArray[np.bool_]) -> NDArray[np.bool_] | None:
    """Return the largest connected object, its holes filled, without what hangs on it thinly."""
    labels, count = ndimage.label(bright)
    if count == 0:
        return None
    sizes = np.bincount(labels.ravel())
    sizes[0] = 0
    whole = ndimage.binary_fill_holes(labels == int(sizes.argmax()))
    thin = max(1, round(0.08 * math.sqrt(float(whole.sum()) / math.pi)))
    core: NDArray[np.bool_] = ndimage.binary_opening(whole, iterations=thin)
    if core.any():
        return core
    everything: NDArray[np.bool_] = whole
    return everything


def _levels(
    values: Floats,
    spacing_mm: tuple[float, float],
    center: tuple[float, float],
    radius: float,
    reach: float,
) -> tuple[float, float]:
    """Return the medians just inside and just outside the circle: of a wall, if there is one."""
    y = np.arange(values.shape[0])[:, None] * spacing_mm[0] - center[0]
    x = np.arange(values.shape[1])[None, :] * spacing_mm[1] - center[1]
    r = np.hypot(y, x)
    inner = values[(r < radius - 0.4 * reach) & (r > radius - reach)]
    outer = values[(r > radius + 0.4 * reach) & (r < radius + reach)]
    if not len(outer):
        outer = values[r > radius]
    return float(np.median(inner)), float(np.median(outer)) if len(outer) else float(values.min())


def _rays(
    values: Floats,
    spacing_mm: tuple[float, float],
    center: tuple[float, float],
    radius: float,
    reach: float,
    level: float,
) -> tuple[Floats, Floats]:
    """Return angle and distance of the outermost crossing of each ray that has one."""
    angle = 2.0 * np.pi * np.arange(RAYS) / RAYS
    distance = np.arange(radius - reach, radius + reach, min(spacing_mm) / 4)
    place = np.stack(
        [
            (center[0] - distance * np.sin(angle)[:, None]) / spacing_mm[0],
            (center[1] + distance * np.cos(angle)[:, None]) / spacing_mm[1],
        ]
    )
    along = ndimage.map_coordinates(values, place, order=1, mode="constant", cval=np.nan)
    within = np.isfinite(along).all(axis=1)
    above = along >= level
    last = above.shape[1] - 1 - np.argmax(above[:, ::-1], axis=1)
    good = within & above.any(axis=1) & (last < above.shape[1] - 1) & above[:, 0]
    ray, k = np.flatnonzero(good), last[good]
    high, low = along[ray, k], along[ray, k + 1]
    share = (high - level) / (high - low)
    return angle[good], distance[k] + share * (distance[1] - distance[0])


def _fit(
    points: Floats, center: tuple[float, float], radius: float, soft: float
) -> tuple[tuple[float, float], float]:
    def off(p: Floats) -> Floats:
        found: Floats = np.hypot(points[0] - p[0], points[1] - p[1]) - p[2]
        return found

    found = optimize.least_squares(
        off,
        (*center, radius),
        loss="soft_l1",
        f_scale=soft,
        xtol=CLOSE,
        ftol=CLOSE,
        gtol=CLOSE,
    )
    return (float(found.x[0]), float(found.x[1])), float(found.x[2])


def _judged(
    points: Floats,
    center: tuple[float, float],
    radius: float,
    pixel: float,
    levels: tuple[float, float],
) -> Circle | NotMeasured:
    y, x = points[0] - center[0], points[1] - center[1]
    angle, off = np.arctan2(-y, x), np.hypot(y, x) - radius
    waves = np.stack([np.ones(len(angle)), np.cos(2 * angle), np.sin(2 * angle)], axis=1)
    near = np.abs(off) <= max(2.0 * pixel, MOST_ELLIPTIC * radius)
    shape, *_ = np.linalg.lstsq(waves[near], off[near], rcond=None)
    ellipticity = 2.0 * float(np.hypot(shape[1], shape[2])) / radius
    rest = off - waves @ shape
    close = np.abs(rest) <= pixel
    if ellipticity > MOST_ELLIPTIC:
        return NotMeasured(
            f"the object is not round: its radii differ by {100 * ellipticity:.1f} %;"
            f" {100 * MOST_ELLIPTIC:.0f} % are allowed",
            REMEDY,
        )
    if close.sum() < VALID_SHARE * RAYS:
        return NotMeasured(
            f"only {100 * float(close.sum()) / RAYS:.0f} % of the object's edge lies within a"
            f" pixel of a circle; {100 * VALID_SHARE:.0f} % are needed",
            REMEDY,
        )
    block = ((angle + np.pi) / (2 * np.pi) * BLOCKS).astype(int) % BLOCKS
    count = np.bincount(block[close], minlength=BLOCKS)
    total = np.bincount(block[close], rest[close], minlength=BLOCKS)
    means = total[count > 0] / count[count > 0]
    doubt = float(means.std(ddof=5)) / math.sqrt(len(means))  # circle and ellipse took five
    return Circle(center, radius, doubt, ellipticity, *levels)
