"""How much water a slice amounts to, and how long a beam's path through it is on average."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from scipy import ndimage

from ct_measure_plugin.physics.results import NotMeasured, Quantity

if TYPE_CHECKING:
    from numpy.typing import ArrayLike

__all__ = ["mean_water_path", "water_equivalent_diameter"]

#: Above this a pixel belongs to the object and not to the air around it, HU.
_OBJECT_HU = -800.0

#: Mean over a disc's points of the mean chord through each, in diameters: 8/(3π).
_MEAN_CHORD = 8.0 / (3.0 * math.pi)

#: Its spread between a disc's middle (1) and its border (2/π), as one standard uncertainty.
_U_CHORD = 0.1


def water_equivalent_diameter(
    image: ArrayLike, spacing_mm: tuple[float, float]
) -> Quantity | NotMeasured:
    """Return the diameter of the water cylinder that attenuates like a slice, mm.

    Parameters
    ----------
    image : array, shape (ny, nx)
        CT numbers; the object with air around it.
    spacing_mm : (float, float)
        dy, dx.

    Notes
    -----
    2 √(A/π) with A = Σ (1 + HU/1000) times the pixel's area over the object, after AAPM Report 220
    (2014; from memory). The table, if it is in the slice, counts.

    Examples
    --------
    >>> y, x = np.mgrid[-50:51, -50:51]
    >>> image = np.where(np.hypot(y, x) < 40, 0.0, -1000.0)
    >>> print(water_equivalent_diameter(image, (1.0, 1.0)))
    79.9 ± 1.0 mm
    """
    pixels = np.asarray(image, dtype=float)
    inside = ndimage.binary_fill_holes(ndimage.gaussian_filter(pixels, 1.0) > _OBJECT_HU)
    if not inside.any():
        return NotMeasured("the slice holds nothing but air", "choose a slice through the phantom")
    area = float(np.sum(1.0 + pixels[inside] / 1000.0)) * spacing_mm[0] * spacing_mm[1]
    if not area > 0:
        return NotMeasured("the slice holds nothing but air", "choose a slice through the phantom")
    return Quantity(2.0 * math.sqrt(area / math.pi), "mm", max(spacing_mm))


def mean_water_path(image: ArrayLike, spacing_mm: tuple[float, float]) -> Quantity | NotMeasured:
    """Return the water path of a ray through the slice, averaged over its points and directions.

    Notes
    -----
    The mean chord through a point of a disc, averaged over the disc, is 8/(3π) of its diameter:
    ∫ chord² over ∫ chord. The middle's is the diameter, the border's 2/π of it.

    Examples
    --------
    >>> y, x = np.mgrid[-50:51, -50:51]
    >>> image = np.where(np.hypot(y, x) < 40, 0.0, -1000.0)
    >>> print(mean_water_path(image, (1.0, 1.0)))
    67.8 ± 8.0 mm
    """
    diameter = water_equivalent_diameter(image, spacing_mm)
    if isinstance(diameter, NotMeasured):
        return diameter
    doubt = math.hypot(_U_CHORD * diameter.value, _MEAN_CHORD * (diameter.uncertainty or 0.0))
    return Quantity(_MEAN_CHORD * diameter.value, "mm", doubt)
