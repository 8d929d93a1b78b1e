"""Targets for an MTF on one slice of a Volume: padding, frame and saturation dealt with."""

from __future__ import annotations

from typing import TYPE_CHECKING

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.targets import Target, TargetsFound, Unsuitable, find_targets

if TYPE_CHECKING:
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["Target", "TargetsFound", "Unsuitable", "targets_on"]


def targets_on(volume: Volume, slice_index: int, *, most: int = 12) -> TargetsFound:
    """Find straight edges, rods and wires on a slice, and boxes that would measure their MTF well.

    Parameters
    ----------
    volume : Volume
        The series.
    slice_index : int
        Which slice, counted from 0.
    most : int
        So many candidates are measured, the most promising first.

    Returns
    -------
    TargetsFound
        Its regions stand in the Volume's image frame, on this slice; any of them can be given to
        the measurement that it names.

    Raises
    ------
    ArgumentError
        If the Volume has no such slice, or the slice is too small or holds no numbers.

    Examples
    --------
    >>> import numpy as np, ct_measure_plugin as ctm
    >>> from scipy.special import ndtr
    >>> y, x = np.mgrid[0:96, 0:96] * 0.5
    >>> rod = 300 * ndtr((9.0 - np.hypot(y - 24, x - 23)) / 0.5)
    >>> volume = ctm.Volume(rod, spacing_mm=(2.0, 0.5, 0.5))
    >>> [one] = targets_on(volume, 0).targets
    >>> one.measurement, round(ctm.measure(one.measurement, volume, one.region).radius.value, 1)
    ('disc_mtf', 9.0)
    """
    count = volume.shape[0]
    if not 0 <= slice_index < count:
        raise ArgumentError("slice_index", f"must lie within 0 to {count - 1}", slice_index)
    plane = volume.plane(slice_index)
    found = find_targets(
        plane,
        spacing_mm=volume.spacing_mm[1:],
        origin_mm=volume.origin_mm[1:],
        z_mm=float(volume.positions_mm[slice_index]),
        padding=volume.padding(slice_index, plane),
        limits=volume.representable_hu,
        unit=volume.unit,
        most=most,
    )
    return TargetsFound(
        targets=found.targets,
        others=found.others,
        blur=found.blur,
        cautions=(*volume.cautions, *found.cautions),
    )
