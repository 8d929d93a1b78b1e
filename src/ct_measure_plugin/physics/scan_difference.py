"""The difference of two scans of one object: their noise, without the object."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.results import Caution

if TYPE_CHECKING:
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["scan_difference"]


def scan_difference(first: Volume, second: Volume) -> Volume:
    """Return (first − second)/√2, a Volume with the noise of one scan and no object.

    Parameters
    ----------
    first, second : Volume
        Repeat scans on the same grid.

    Raises
    ------
    ArgumentError
        If their grids or units differ.

    Notes
    -----
    A voxel that is padding in either scan becomes NaN. The title says what was subtracted.

    Examples
    --------
    >>> from ct_measure_plugin.physics.volume import Volume
    >>> scans = [Volume(np.full((1, 8, 8), v), (1.0, 1.0, 1.0)) for v in (3.0, 1.0)]
    >>> round(float(scan_difference(*scans).hu[0, 0, 0]), 4)
    1.4142
    """
    if first.shape != second.shape:
        raise ArgumentError("second", f"must have the shape {first.shape}", second.shape)
    if not np.allclose(first.spacing_mm, second.spacing_mm, rtol=1e-6):
        raise ArgumentError(
            "second", f"must have the spacing {first.spacing_mm}", second.spacing_mm
        )
    if first.unit != second.unit:
        raise ArgumentError("second", f"must be in {first.unit}", second.unit)
    values = np.empty(first.shape, dtype=np.float64)
    for k in range(first.shape[0]):
        a, b = first.plane(k), second.plane(k)
        values[k] = (a.astype(float) - b) / math.sqrt(2.0)
        for scan, plane in ((first, a), (second, b)):
            padding = scan.padding(k, plane)
            if padding is not None:
                values[k][padding] = np.nan
    note = Caution(
        "repeat-difference",
        "Two scans were subtracted; the noise is that of one.",
        "It holds if they were taken at the same place and tube position.",
    )
    known = {c.code: c for c in (*first.cautions, *second.cautions)}
    names = (scan.source.title or "scan" for scan in (first, second))
    return replace(
        first,
        hu=values,
        source=replace(first.source, title="({} − {})/√2".format(*names), content_digest=""),
        padding_hu=None,
        representable_hu=None,
        cautions=(*known.values(), note),
    )
