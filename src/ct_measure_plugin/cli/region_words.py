"""Regions in words on the command line: ``disc center=12.5,-3 radius=10 z=40 name=water``."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from ct_measure_plugin.errors import RegionError

if TYPE_CHECKING:
    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["FIELDS", "HELP", "TEXTS", "region_from_words"]

HELP = (
    "a region in words: KIND then NAME=VALUE, lengths in mm, points as y,x. "
    "disc center=0,0 radius=20 (or diameter=40) | ellipse center= radii= angle= | "
    "ellipsoid center= radii= z-radius= z= | box center= size= angle= | "
    "polygon vertices=y,x;y,x;y,x | segment start= end= width= | "
    "path vertices=y,x;y,x;y,x width= ; each with z=MM, z=LOW:HIGH or "
    "slice=K or slice=K:L (counted from 0), name=WORD, class=WORD, code=SCHEME:VALUE, and "
    "values=LOW:HIGH for the range of values that counts, an end of which may be left out"
)

FIELDS = {
    "center": "center_mm",
    "radius": "radius_mm",
    "radii": "radii_mm",
    "size": "size_mm",
    "angle": "angle_deg",
    "vertices": "vertices_mm",
    "start": "start_mm",
    "end": "end_mm",
    "width": "width_mm",
    "z-radius": "z_radius_mm",
}

#: Words that are kept as text.
TEXTS = {"name": "name", "class": "group", "code": "code"}


def region_from_words(words: str, volume: Volume) -> Region:
    """Return the region that words describe; slice numbers are looked up in the volume.

    Raises
    ------
    RegionError
        If a word is not understood or the region breaks its rules.

    Examples
    --------
    >>> import numpy as np, ct_measure_plugin as ctm
    >>> volume = ctm.Volume(np.zeros((5, 64, 64)), (2.0, 1.0, 1.0))
    >>> water = region_from_words("disc center=30,31 radius=9 slice=2 name=water", volume)
    >>> water == ctm.regions.Disc((30, 31), 9, z_mm=4.0, name="water")
    True
    """
    from ct_measure_plugin.records import region_from_dict

    parts = words.split()
    if not parts:
        raise RegionError("region", "must name a kind, for example disc", words)
    found: dict[str, Any] = {"kind": parts[0]}
    for part in parts[1:]:
        name, equals, value = part.partition("=")
        if not equals or not value:
            raise RegionError(
                "region", "must be KIND NAME=VALUE ..., without spaces in a value", part
            )
        if name in TEXTS:
            found[TEXTS[name]] = value
        elif name == "diameter":
            found["radius_mm"] = _number(name, value) / 2
        elif name == "values":
            found["values"] = _open_range(value)
        elif name == "z":
            found["z_mm"] = _range(name, value)
        elif name == "slice":
            found["z_mm"] = _slice(value, volume)
        elif name == "vertices":
            found["vertices_mm"] = [_point(name, point) for point in value.split(";")]
        elif name in FIELDS:
            found[FIELDS[name]] = _value(name, value)
        else:
            known = ", ".join((*FIELDS, "diameter", "z", "slice", *TEXTS, "values"))
            raise RegionError("region", f"must use the names {known}", name)
    return region_from_dict(found)


def _number(name: str, text: str) -> float:
    try:
        return float(text)
    except ValueError:
        raise RegionError(name, "must be a number", text) from None


def _point(name: str, text: str) -> list[float]:
    parts = [_number(name, part) for part in text.split(",")]
    if len(parts) != 2:
        raise RegionError(name, "must be two numbers y,x", text)
    return parts


def _value(name: str, text: str) -> float | list[float]:
    if name in ("radius", "angle", "width", "z-radius"):
        return _number(name, text)
    return _point(name, text)


def _range(name: str, text: str) -> float | list[float]:
    low, colon, high = text.partition(":")
    return [_number(name, low), _number(name, high)] if colon else _number(name, low)


def _open_range(text: str) -> list[float | None]:
    low, colon, high = text.partition(":")
    if not colon:
        raise RegionError("values", "must be LOW:HIGH", text)
    return [_number("values", end) if end else None for end in (low, high)]


def _slice(text: str, volume: Volume) -> float | list[float]:
    first, colon, last = text.partition(":")
    try:
        numbers = [int(first), int(last)] if colon else [int(first)]
    except ValueError:
        raise RegionError("slice", "must be a whole number, or two as K:L", text) from None
    count = volume.shape[0]
    if not all(0 <= number < count for number in numbers):
        raise RegionError("slice", f"must lie within 0 to {count - 1}", text)
    positions = [float(volume.positions_mm[number]) for number in numbers]
    return positions if colon else positions[0]
