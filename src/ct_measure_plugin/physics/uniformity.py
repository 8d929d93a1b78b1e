"""Whether a cylinder of one material reads the same everywhere."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.cylinder import Cylinder, find_cylinder, given_cylinder
from ct_measure_plugin.physics.plane_stack import checked_planes
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.uniformity_answer import Assembly, Uniformity
from ct_measure_plugin.physics.uniformity_field import gather
from ct_measure_plugin.physics.uniformity_picture import deviation_map
from ct_measure_plugin.physics.uniformity_samples import Cells, Places, disc_means

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike

__all__ = ["Uniformity", "uniformity"]

#: Rings of cells about the middle one.
RINGS = 6


def uniformity(
    image: ArrayLike,
    *,
    spacing_mm: tuple[float, float],
    z_mm: Sequence[float] | None = None,
    circle_mm: tuple[float, float, float] | None = None,
    places: Places | None = None,
    rotation_mm: tuple[float, float] | None = None,
    unit: str = "HU",
) -> Uniformity | NotMeasured:
    """Return how uniform the image of a cylinder is.

    Parameters
    ----------
    image : array, shape (ny, nx) or (nz, ny, nx)
        Slices through a cylinder of one material.
    spacing_mm : (float, float)
        dy and dx.
    z_mm : sequence of float, optional
        Position of each slice; by default 0, 1, 2 …
    circle_mm : (float, float, float), optional
        y and x of the axis, from the centre of pixel (0, 0), and radius, of a cylinder placed by
        hand. By default it is found.
    places : Places, optional
        Where to look; by default four edge regions of a tenth of the radius at 0.8 of it, and the
        same in the middle.
    rotation_mm : (float, float), optional
        y and x of the rotation centre, from the centre of pixel (0, 0), about which rings lie; by
        default the middle of the image.
    unit : str
        Of the values.

    Returns
    -------
    Uniformity or NotMeasured
        NotMeasured if no cylinder is found, or it holds something else.

    Raises
    ------
    ArgumentError
        On misuse.

    Notes
    -----
    How far a region's mean is uncertain is read off the image: from the scatter, about a smooth
    trend, of as many equal discs as fit at the same distance (edge) or about the middle (centre),
    averaged over the same slices. Correlation of pixels and of slices is thus contained.

    Cup and shading are a0 + a1 x + a2 y + a3 (1 − q) + a4 (1 − q²) + a5 (1 − q³), q = √(1 − r²),
    lengths in units of the radius, fitted to 169 cells of equal area without rings.

    Examples
    --------
    >>> y, x = np.mgrid[:128, :128]
    >>> r = np.hypot(y - 63.2, x - 64.5)
    >>> image = np.where(r < 50, 20 * (r / 50) ** 2, -1000.0)
    >>> found = uniformity(image, spacing_mm=(1.0, 1.0))
    >>> round(found.cupping.value, 1)  # 20 · 0.8², the two regions are of one size
    12.8
    >>> round(found.cup_depth.value, 1)  # 20 · 0.9²
    16.2
    """
    planes = checked_planes(image, spacing_mm, least=16)
    z = np.arange(len(planes), dtype=float) if z_mm is None else np.asarray(z_mm, dtype=float)
    if z.shape != (len(planes),):
        raise ArgumentError("z_mm", f"must hold {len(planes)} positions", z.shape)
    places = Places() if places is None else places
    found: Cylinder | NotMeasured
    if circle_mm is not None:
        found = given_cylinder((circle_mm[0], circle_mm[1]), circle_mm[2], z)
    else:
        found = find_cylinder(planes, spacing_mm=spacing_mm, z_mm=z)
    if isinstance(found, NotMeasured):
        return found
    if not _within(found, planes.shape[1:], spacing_mm, places.reach):
        return NotMeasured("the field reaches out of the image", "place the cylinder within it")
    cells = Cells(RINGS, places.field)
    shown = [planes[k] for k in found.slices]
    middle = [(n - 1) / 2 * s for n, s in zip(planes.shape[1:], spacing_mm, strict=True)]
    rotation = (middle[0], middle[1]) if rotation_mm is None else rotation_mm
    sums = gather(shown, found.centers_mm, found.radius_mm, spacing_mm, cells, rotation)
    if isinstance(sums, NotMeasured):
        return sums
    discs = disc_means(shown, found, places, spacing_mm)
    picture = deviation_map(
        shown, found, spacing_mm, places.field, float(discs.centre.mean()), unit
    )
    return Assembly(found, places, cells, sums, discs, unit).result(picture)


def _within(
    found: Cylinder, shape: tuple[int, ...], spacing_mm: tuple[float, float], share: float
) -> bool:
    reach = share * found.radius_mm
    last = (np.array(shape) - 1) * np.asarray(spacing_mm)
    low, high = found.centers_mm.min(axis=0) - reach, found.centers_mm.max(axis=0) + reach
    return bool(np.all(low >= 0) and np.all(high <= last))
