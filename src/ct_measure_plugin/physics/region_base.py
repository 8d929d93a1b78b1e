"""What every region has: its slices, its name, class and code, its range of values."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any, ClassVar, TypeAlias

import numpy as np

from ct_measure_plugin.errors import RegionError

__all__ = [
    "LONGEST_CODE",
    "Extent",
    "Point",
    "Region",
    "as_point",
    "as_range",
    "finite",
    "positive",
    "set_points",
]

#: Characters of a code and of its scheme (DICOM PS3.5, 6.2, value representation SH).
LONGEST_CODE = 16

Point: TypeAlias = tuple[float, float]
Extent: TypeAlias = float | tuple[float, float] | None


def finite(name: str, *values: float) -> None:
    """Raise RegionError if a number is not finite."""
    if not all(math.isfinite(value) for value in values):
        raise RegionError(name, "must be finite", values)


def as_point(name: str, value: Any) -> Point:
    """Return two finite numbers as floats, whatever sequence they came in."""
    try:
        y, x = (float(part) for part in value)
    except (TypeError, ValueError):
        raise RegionError(name, "must be two numbers (y, x)", value) from None
    finite(name, y, x)
    return y, x


def as_range(name: str, value: Any) -> tuple[float, float]:
    """Return a lowest and a highest number as floats."""
    rule = "must be given as (low, high)"
    try:
        low, high = (float(part) for part in value)
    except (TypeError, ValueError):
        raise RegionError(name, rule, value) from None
    if not low <= high:
        raise RegionError(name, rule, value)
    return low, high


def set_points(region: Region, *names: str) -> None:
    """Check fields that are points and keep them as floats."""
    for name in names:
        object.__setattr__(region, name, as_point(name, getattr(region, name)))


def positive(name: str, *values: float) -> None:
    """Raise RegionError if a number is not finite and greater than 0."""
    finite(name, *values)
    if not all(value > 0 for value in values):
        raise RegionError(name, "must be greater than 0", values if len(values) > 1 else values[0])


def _coded(text: str) -> None:
    scheme, _, value = text.partition(":")
    fits = all(0 < len(part.strip()) <= LONGEST_CODE for part in (scheme, value))
    if text and not (fits and "\\" not in text):
        raise RegionError(
            "code", f"must be scheme:value, each of 1 to {LONGEST_CODE} characters", text
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class Region:
    """Parent of all regions.

    Attributes
    ----------
    z_mm : float, (float, float) or None
        The slice nearest to a position, the slices whose centres lie in a range (both ends
        included), or None for every slice.
    name : str
        A name people gave it; shown in tables and records.
    group : str
        Its class: what it shows, "liver" or "rod".
    code : str
        The class as a code, "scheme:value" as in DICOM's coded entries, each of 1 to 16 characters.
    values : (float, float) or None
        A threshold within the region: only pixels from the first to the second value count, both
        included; an end may be infinite.
    """

    kind: ClassVar[str] = "region"

    z_mm: Extent = None
    name: str = ""
    group: str = ""
    code: str = ""
    values: tuple[float, float] | None = None

    def __post_init__(self) -> None:
        _coded(self.code)
        if self.values is not None:
            object.__setattr__(self, "values", as_range("values", self.values))
        if self.z_mm is None:
            return
        try:
            object.__setattr__(self, "z_mm", float(self.z_mm))  # type: ignore[arg-type]
        except TypeError:
            object.__setattr__(self, "z_mm", as_range("z_mm", self.z_mm))
        finite("z_mm", *np.atleast_1d(self.z_mm).tolist())
