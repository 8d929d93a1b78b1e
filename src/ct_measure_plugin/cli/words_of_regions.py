"""Regions written as the words that people type, see ``region_words``."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from ct_measure_plugin.cli.region_words import FIELDS, TEXTS
from ct_measure_plugin.errors import RegionError

if TYPE_CHECKING:
    from ct_measure_plugin.physics.regions import Region

__all__ = ["words_of"]


def words_of(region: Region) -> str:
    """Return the words that describe a region, to be read by :func:`region_from_words`.

    Raises
    ------
    RegionError
        If its name or class holds a space, or its kind has no words.

    Examples
    --------
    >>> import ct_measure_plugin as ctm
    >>> words_of(ctm.regions.Disc((30, 31.5), 9, z_mm=4.0, name="water"))
    'disc center=30,31.5 radius=9 z=4 name=water'
    """
    from ct_measure_plugin.records import region_to_dict

    names = {field: word for word, field in (FIELDS | TEXTS).items()} | {"z_mm": "z"}
    found = region_to_dict(region)
    parts = [str(found.pop("kind"))]
    for field, value in found.items():
        if field not in (*names, "values"):
            raise RegionError("region", "must be of a kind that words describe", region.kind)
        if isinstance(value, str) and len(value.split()) != 1:
            raise RegionError(names[field], "must be one word", value)
        parts.append(f"{names.get(field, field)}={_text(field, value)}")
    return " ".join(parts)


def _text(field: str, value: Any) -> str:
    """Return a value as it is written, to the last bit."""
    if isinstance(value, str):
        return value
    if isinstance(value, int | float):
        return str(int(value)) if float(value).is_integer() else repr(value)
    parts = ["" if part is None else _text(field, part) for part in value]
    mark = {"z_mm": ":", "values": ":"}.get(field, ";" if isinstance(value[0], list) else ",")
    return mark.join(parts)
