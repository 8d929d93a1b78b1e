"""Small round spots on a slice: cross-sections of wires, and beads."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import ndimage
from skimage import feature

from ct_measure_plugin.physics.edge_points import level_in_blocks
from ct_measure_plugin.physics.results import NotMeasured, Quantity

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]
    Flags = NDArray[np.bool_]

__all__ = ["Spot", "find_spots"]

#: SDs in pixels of the smoothing of a spot and of its surroundings.
FINE_PX, WIDE_PX = 1.0, 3.0

#: Difference of the two over its noise from which a place is looked at.
STANDS_OUT = 8.0

#: Places looked at, at most, the clearest first; edges of strong contrast have many.
MOST_SPOTS = 300

#: The ring about a spot may differ from direction to direction by this share of its height.
MOST_UNEVEN = 0.2

#: Radii in pixels of the ring about a spot.
RING_PX = (5.0, 8.0)

#: Least ratio of the curvatures of its top along its two axes.
LEAST_ROUND = 0.45

#: SDs in pixels at which a spot's height is compared to tell its width.
NARROW_PX, BROAD_PX = 0.7, 1.4

#: Wider spots are no wires.
WIDEST_PX = 4.0

#: The 20 % quantile of |x| over the SD of a normal distribution.
NORMAL_LOW = 0.2533


@dataclass(frozen=True, slots=True)
class Spot:
    """A small round spot.

    Attributes
    ----------
    center : (float, float)
        y and x, mm from the centre of pixel (0, 0).
    height, noise : float
        Over its surroundings, and the SD of these.
    fwhm : float
        Full width at half maximum, mm, as of a Gaussian spot.
    """

    center: tuple[float, float]
    height: float
    noise: float
    fwhm: float

    def doubt(self, pixel_area: float) -> float:
        """Return the relative uncertainty of its width.

        The Cramér-Rao bound of a Gaussian spot of unknown height in independent noise,
        sqrt(pixel area / π) noise / (height σ): the least that is possible.
        """
        sigma = self.fwhm / 2.3548
        return self.noise / abs(self.height) * math.sqrt(pixel_area / math.pi) / sigma

    def over_surroundings(
        self, pixel_area: float, unit: str
    ) -> tuple[Quantity, Quantity | NotMeasured]:
        """Return the height, and the height over the noise.

        The height's uncertainty is the least that is possible for a Gaussian spot of unknown width
        in independent noise, sqrt(2 pixel area / π) noise / σ; the noise's is that of the SD of
        half the ring's pixels, as neighbours are alike.
        """
        own = self.noise * math.sqrt(2 * pixel_area / math.pi) / (self.fwhm / 2.3548)
        height = Quantity(self.height, unit, own)
        if self.noise <= 0:
            return height, NotMeasured("there is no noise", "none is needed")
        ratio = abs(self.height) / self.noise
        pixels = math.pi * (RING_PX[1] ** 2 - RING_PX[0] ** 2) / 2
        return height, Quantity(
            ratio, "", ratio * math.hypot(own / self.height, (2 * pixels) ** -0.5)
        )


def find_spots(
    image: Floats, spacing_mm: tuple[float, float], mask: Flags | None = None
) -> list[Spot]:
    """Return the small round spots of a slice, bright or dark, the clearest first.

    Notes
    -----
    A spot is a peak of the difference of two Gaussians, eight times its noise; its top is curved
    about alike along both axes, and the ring about it is even: corners and ridges are neither.
    """
    fine = ndimage.gaussian_filter(image, FINE_PX, mode="nearest")
    peaked = np.abs(fine - ndimage.gaussian_filter(image, WIDE_PX, mode="nearest"))
    floor = 1e-3 * float(peaked.max(initial=0.0)) or 1.0
    noise = np.maximum(level_in_blocks(peaked, mask) / NORMAL_LOW, floor)
    score = peaked / noise
    if mask is not None:
        score = np.where(mask, score, 0.0)
    places = feature.peak_local_max(
        score, min_distance=3, threshold_abs=STANDS_OUT, exclude_border=8, num_peaks=MOST_SPOTS
    )
    found = (_spot(image, fine, (int(i), int(j)), spacing_mm) for i, j in places)
    return [spot for spot in found if spot is not None]


def _spot(
    image: Floats, fine: Floats, at: tuple[int, int], spacing_mm: tuple[float, float]
) -> Spot | None:
    i, j = at
    part = fine[i - 1 : i + 2, j - 1 : j + 2]
    bend_y = float(part[0, 1] - 2 * part[1, 1] + part[2, 1])
    bend_x = float(part[1, 0] - 2 * part[1, 1] + part[1, 2])
    cross = float(part[2, 2] + part[0, 0] - part[0, 2] - part[2, 0]) / 4
    small, large = np.linalg.eigvalsh([[bend_y, cross], [cross, bend_x]])
    if not small * large > 0 or min(small / large, large / small) < LEAST_ROUND:
        return None
    ring = _ring(image, at, spacing_mm)
    if ring is None:
        return None
    level, uneven, noise = ring
    shift_y = 0.5 * float(part[0, 1] - part[2, 1]) / bend_y
    shift_x = 0.5 * float(part[1, 0] - part[1, 2]) / bend_x
    if max(abs(shift_y), abs(shift_x)) > 1:
        return None
    heights = [
        _smoothed_at(image, at, (shift_y, shift_x), sd) - level for sd in (NARROW_PX, BROAD_PX)
    ]
    if heights[0] * small > 0 or heights[1] == 0 or uneven > MOST_UNEVEN * abs(heights[0]):
        return None
    ratio = heights[0] / heights[1]
    if not ratio > 1:
        return None
    square = (BROAD_PX**2 - ratio * NARROW_PX**2) / (ratio - 1)  # of a Gaussian's SD, pixels
    if not 0 < square < WIDEST_PX**2:
        return None
    center = (i + shift_y) * spacing_mm[0], (j + shift_x) * spacing_mm[1]
    height = heights[0] * (square + NARROW_PX**2) / square
    pixel = math.sqrt(spacing_mm[0] * spacing_mm[1])
    return Spot(center, height, noise, 2.3548 * math.sqrt(square) * pixel)


def _ring(
    image: Floats, at: tuple[int, int], spacing_mm: tuple[float, float]
) -> tuple[float, float, float] | None:
    """Return level, unevenness and noise of the ring about a place."""
    (i, j), half = at, math.ceil(RING_PX[1])
    part = image[max(i - half, 0) : i + half + 1, max(j - half, 0) : j + half + 1]
    if part.shape != (2 * half + 1, 2 * half + 1):
        return None
    pixel = max(spacing_mm)
    y, x = np.mgrid[-half : half + 1, -half : half + 1] * np.array(spacing_mm)[:, None, None]
    r = np.hypot(y, x) / pixel
    inside = (r >= RING_PX[0]) & (r <= RING_PX[1])
    values = part[inside]
    level = float(np.median(values))
    octant = np.floor((np.arctan2(y, x)[inside] / math.pi + 1) * 4).astype(int) % 8
    means = np.bincount(octant, values) / np.maximum(np.bincount(octant), 1)
    return level, float(np.abs(means - level).max()), float(values.std())


def _smoothed_at(
    image: Floats, at: tuple[int, int], shift: tuple[float, float], sd: float
) -> float:
    """Return the image smoothed by a Gaussian about a place between pixels."""
    i, j = at
    half = math.ceil(4 * sd)
    steps = np.arange(-half, half + 1)
    down, right = (np.exp(-0.5 * ((steps - one) / sd) ** 2) for one in shift)
    part = image[i - half : i + half + 1, j - half : j + half + 1]
    return float(down @ part @ right / down.sum() / right.sum())
