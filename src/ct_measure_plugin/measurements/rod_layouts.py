"""Layouts of rods from a file, laid on a volume, and made from regions drawn by hand."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import yaml
from pydantic import BaseModel, ConfigDict, Field, field_validator

from ct_measure_plugin.errors import ArgumentError, MaterialsError
from ct_measure_plugin.measurements.materials import (
    MaterialEntry,
    find_material,
    shipped_materials,
)
from ct_measure_plugin.measurements.written_files import checked, read_written
from ct_measure_plugin.physics.regions import Disc, Ellipse
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.rod_layout import LayoutRod, RodsFound
from ct_measure_plugin.physics.rod_layout import find_rods as find_on_slice

if TYPE_CHECKING:
    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = [
    "FoundRods",
    "LayoutEntry",
    "RodLayout",
    "find_rods",
    "layout_from",
    "layout_of",
    "load_layout",
    "save_layout",
]


class _Frozen(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid")


class LayoutEntry(_Frozen):
    """One rod: its material, its centre (y down, x) about any origin, its diameter, in mm."""

    material: str = Field(min_length=1)
    center_mm: tuple[float, float]
    diameter_mm: float = Field(gt=0, le=500)
    name: str = ""


class RodLayout(_Frozen):
    """Where the rods of a phantom are, seen as the slices are shown.

    Examples
    --------
    >>> rods = [{"material": m, "center_mm": c, "diameter_mm": 12}
    ...         for m, c in (("PMMA", (0, 30)), ("PTFE", (0, -30)), ("LDPE", (-25, 4)))]
    >>> len(RodLayout.model_validate({"title": "Three rods (invented)", "rods": rods}).rods)
    3
    """

    title: str = ""
    tolerance_mm: float = Field(0.5, gt=0, le=10)
    rods: tuple[LayoutEntry, ...] = Field(min_length=3, max_length=100)

    @field_validator("rods")
    @classmethod
    def _apart(cls, rods: tuple[LayoutEntry, ...]) -> tuple[LayoutEntry, ...]:
        for k, rod in enumerate(rods):
            for other in rods[:k]:
                if np.hypot(*np.subtract(rod.center_mm, other.center_mm)) < rod.diameter_mm / 2:
                    raise ValueError(f"must not overlap: {other.material} and {rod.material}")
        return rods

    def typed(self, materials: Sequence[MaterialEntry]) -> tuple[LayoutRod, ...]:
        """Return the rods as physics takes them, their materials looked up."""
        return tuple(
            LayoutRod(
                rod.center_mm, rod.diameter_mm, find_material(rod.material, materials), rod.name
            )
            for rod in self.rods
        )


def layout_from(given: Any) -> RodLayout:
    """Return a checked layout.

    Raises
    ------
    MaterialsError
        With every fault at once, each under its place.
    """
    found, faults = checked(RodLayout, given, "layout")
    if found is None:
        raise MaterialsError(dict(faults))
    return found


def load_layout(path: str | Path) -> RodLayout:
    """Read a layout from a YAML or JSON file.

    Raises
    ------
    MaterialsError
        If the file cannot be read or is no layout.
    """
    return layout_from(read_written(path))


def save_layout(layout: RodLayout, path: str | Path) -> Path:
    """Write a layout as YAML, to be edited and read back."""
    file = Path(path)
    data = layout.model_dump(mode="json", exclude_defaults=True)
    file.write_text(yaml.safe_dump(data, sort_keys=False, allow_unicode=True), encoding="utf-8")
    return file


def layout_of(
    regions: Sequence[Region],
    *,
    title: str = "",
    materials: Sequence[MaterialEntry] | None = None,
) -> RodLayout:
    """Return the layout of round regions that were drawn around whole rods, named by material.

    Parameters
    ----------
    regions : sequence of Disc or Ellipse
        At least three; each as large as its rod.
    title : str
        What the phantom is called.
    materials : sequence of MaterialEntry, optional
        The list that the names come from.

    Raises
    ------
    ArgumentError, UnknownNameError
        If a region is not round or its name is no material.

    Examples
    --------
    >>> places = {"PMMA": (10.0, 42.0), "PTFE": (12.0, 8.0), "LDPE": (40.0, 20.0)}
    >>> drawn = [Disc(center, 6.0, name=name) for name, center in places.items()]
    >>> layout_of(drawn, title="Three rods (invented)").rods[1].diameter_mm
    12.0
    """
    entries = []
    for region in regions:
        if isinstance(region, Disc):
            diameter = 2 * region.radius_mm
        elif isinstance(region, Ellipse) and min(region.radii_mm) > 0.8 * max(region.radii_mm):
            diameter = region.radii_mm[0] + region.radii_mm[1]
        else:
            raise ArgumentError("regions", "must be round", region.kind)
        known = find_material(region.name, shipped_materials() if materials is None else materials)
        entries.append(
            LayoutEntry(material=known.name, center_mm=region.center_mm, diameter_mm=diameter)
        )
    return layout_from(
        {"title": title, "rods": [entry.model_dump(exclude_defaults=True) for entry in entries]}
    )


@dataclass(frozen=True, slots=True, eq=False)
class FoundRods:
    """Rods found on a volume.

    Attributes
    ----------
    regions : tuple of Disc
        Well inside each rod, named by its material, in the layout's order.
    found : RodsFound
        Turn, shift and the rods, in the image frame.
    """

    regions: tuple[Disc, ...]
    found: RodsFound


def find_rods(
    volume: Volume,
    layout: RodLayout | str | Path,
    *,
    z_mm: float | None = None,
    slices: int = 1,
    share: float = 0.7,
    materials: Sequence[MaterialEntry] | None = None,
) -> FoundRods | NotMeasured:
    """Find the rods of a layout on a volume, at any rotation, and return regions inside them.

    Parameters
    ----------
    volume : Volume
        What was scanned.
    layout : RodLayout or path
        Where the rods are in their phantom.
    z_mm : float, optional
        The slice; by default the middle one.
    slices : int
        So many slices about it are averaged.
    share : float
        Radius of the regions over that of the rods, 0 to 1.
    materials : sequence of MaterialEntry, optional
        The list that the layout's materials are looked up in.

    Returns
    -------
    FoundRods or NotMeasured

    Raises
    ------
    MaterialsError, UnknownNameError, ArgumentError
        If the layout is wrong, a material is not listed, or a number is out of range.
    """
    wanted = layout if isinstance(layout, RodLayout) else load_layout(layout)
    if not 0 < share < 1:
        raise ArgumentError("share", "must lie between 0 and 1", share)
    if slices < 1:
        raise ArgumentError("slices", "must be at least 1", slices)
    rods = wanted.typed(shipped_materials() if materials is None else materials)
    middle = volume.shape[0] // 2 if z_mm is None else volume.nearest_slice(z_mm)
    first = max(0, min(middle - (slices - 1) // 2, volume.shape[0] - slices))
    used = range(first, min(first + slices, volume.shape[0]))
    image = np.mean([volume.plane(k).astype(float) for k in used], axis=0)
    try:
        found = find_on_slice(
            image, rods, spacing_mm=volume.spacing_mm[1:], tolerance_mm=wanted.tolerance_mm
        )
    except ArgumentError as error:
        if error.argument != "image":
            raise
        return NotMeasured(
            f"the slice cannot be searched: the image {error.rule}", "choose another"
        )
    if isinstance(found, NotMeasured):
        return found
    moved = found.moved(volume.origin_mm[1], volume.origin_mm[2])
    ends = (float(volume.positions_mm[used[0]]), float(volume.positions_mm[used[-1]]))
    regions = tuple(
        Disc(
            (placed.y.value, placed.x.value),
            share * 0.5 * rod.diameter_mm,
            z_mm=ends if len(used) > 1 else ends[0],
            name=placed.material,
        )
        for placed, rod in zip(moved.rods, rods, strict=True)
    )
    return FoundRods(regions, moved)
