"""The same regions on two volumes: both answers, and what changed from one to the other."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.measurements.catalogue import expanded, find, measure_each
from ct_measure_plugin.physics.differences import differences
from ct_measure_plugin.physics.regions import Region
from ct_measure_plugin.physics.results import NotMeasured

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from ct_measure_plugin.measurements.base import Settings
    from ct_measure_plugin.physics.results import Quantity, Result
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["Comparison", "compare", "same_grid"]


@dataclass(frozen=True, slots=True, eq=False)
class Comparison:
    """One question asked of two volumes.

    Attributes
    ----------
    regions : tuple of Region
        Where.
    first, second : Result or NotMeasured
        The answers.
    differences : mapping of str to Quantity
        Second less first, by field name; empty if either was not measured.
    paired : tuple of str
        The differences found from pixel pairs, in which what both volumes share cancels.
    """

    regions: tuple[Region, ...]
    first: Result | NotMeasured
    second: Result | NotMeasured
    differences: Mapping[str, Quantity]
    paired: tuple[str, ...] = ()


def compare(
    name: str,
    first: Volume,
    second: Volume,
    regions: Region | Sequence[Region] = (),
    *,
    settings: Settings | None = None,
) -> tuple[Comparison, ...]:
    """Measure the same regions on two volumes, and return what changed.

    Parameters
    ----------
    name : str
        The measurement.
    first, second : Volume
        Two kernels, two time points, two doses. They may differ in spacing and field of view;
        regions in mm lie at the same place in both.
    regions : Region or sequence of Region
        Where.
    settings : Settings, optional
        Complete; the defaults otherwise.

    Returns
    -------
    tuple of Comparison
        One a region, or one in all where the measurement takes them together.

    Examples
    --------
    >>> import numpy as np, ct_measure_plugin as ctm
    >>> hu = np.random.default_rng(1).normal(0, 10, (1, 64, 64))
    >>> before, after = (ctm.Volume(hu + x, (1.0, 0.5, 0.5)) for x in (0, 12))
    >>> [found] = compare("region_statistics", before, after, ctm.regions.Disc((16, 16), 8))
    >>> round(found.differences["mean"].value, 6), found.paired
    (12.0, ('mean',))
    """
    measurement = find(name)
    settings = measurement.settings_type() if settings is None else settings
    group = expanded(name, (regions,) if isinstance(regions, Region) else regions)
    whole = measurement.regions.together or not group
    parts = [group] if whole else [(region,) for region in group]
    found = []
    for part in parts:
        [one] = measure_each(name, first, part, settings=settings)
        [other] = measure_each(name, second, part, settings=settings)
        if isinstance(one, NotMeasured) or isinstance(other, NotMeasured):
            found.append(Comparison(part, one, other, {}))
            continue
        pairs = (
            measurement.paired(first, second, part, settings) if same_grid(first, second) else {}
        )
        changes = {**differences(one, other), **pairs}
        found.append(Comparison(part, one, other, changes, tuple(pairs)))
    return tuple(found)


def same_grid(first: Volume, second: Volume) -> bool:
    """Tell whether two volumes have their voxels at the same places."""
    return (
        first.shape == second.shape
        and bool(np.allclose(first.spacing_mm, second.spacing_mm, rtol=1e-6))
        and bool(np.allclose(first.origin_mm, second.origin_mm, rtol=0, atol=1e-3))
        and bool(np.allclose(first.positions_mm, second.positions_mm, rtol=0, atol=1e-3))
    )
