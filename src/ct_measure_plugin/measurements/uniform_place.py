"""Where on a slice the noise can be measured: the largest disc of uniform material."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.regions import Disc
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.uniform_disc import least_radius, uniform_disc

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.volume import Volume

__all__ = ["uniform_place"]


def uniform_place(volume: Volume, slice_index: int, *, patch_px: int = 64) -> Disc | NotMeasured:
    """Propose a region for the noise of a slice and of its neighbours.

    Parameters
    ----------
    volume : Volume
        The series.
    slice_index : int
        Which slice, counted from 0.
    patch_px : int
        Side of the patches that it must hold.

    Returns
    -------
    Disc or NotMeasured
        In the image frame, over the slices on which it stays uniform.

    Raises
    ------
    ArgumentError
        If the Volume has no such slice.

    Examples
    --------
    >>> import ct_measure_plugin as ctm
    >>> hu = np.random.default_rng(1).normal(0, 10, (4, 160, 160))
    >>> hu[3, 60:90, 60:90] += 300
    >>> volume = ctm.Volume(hu, spacing_mm=(2.0, 0.5, 0.5))
    >>> found = uniform_place(volume, 1)
    >>> found.z_mm, bool(ctm.measure("noise_power", volume, found, patch_px=32))
    ((0.0, 4.0), True)
    """

    def plane(k: int) -> NDArray[np.generic]:
        values = volume.plane(k)
        padding = volume.padding(k, values)
        return values if padding is None else np.where(padding, -2000, values)

    _, dy, dx = volume.spacing_mm
    found = uniform_disc(
        plane,
        volume.shape[0],
        slice_index,
        spacing_mm=(dy, dx),
        least_mm=least_radius(patch_px * max(dy, dx)),
    )
    if isinstance(found, NotMeasured):
        return found
    (row, column), (_, y, x) = found.center, volume.origin_mm
    z = volume.positions_mm
    return Disc(
        (y + row * dy, x + column * dx),
        found.radius_mm,
        z_mm=(float(z[found.first]), float(z[found.last]))
        if found.last > found.first
        else float(z[found.first]),
        name="uniform",
    )
