"""What a layer offers to be measured: one entry a shape, a point or a label."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from ct_measure_plugin.physics.regions import Region

__all__ = ["Drawn"]


@dataclass(frozen=True, slots=True)
class Drawn:
    """One shape, point or label.

    Attributes
    ----------
    index : int
        Its place on the layer, now; it shifts when another is deleted. For a label, its value.
    name : str
        What people call it.
    region : Region or None
        Where it lies, mm; None if it cannot be a region.
    problem : str
        Why not.
    group : str
        The class it was given: what it shows.
    code : str
        The class as a code, "scheme:value".
    """

    index: int
    name: str
    region: Region | None
    problem: str = ""
    group: str = ""
    code: str = ""
