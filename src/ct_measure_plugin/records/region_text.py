"""Regions as plain dictionaries, for plans and records, and back."""

from __future__ import annotations

import base64
import binascii
import math
import zlib
from dataclasses import MISSING, fields
from typing import Any

import numpy as np

from ct_measure_plugin.errors import RegionError
from ct_measure_plugin.physics import regions
from ct_measure_plugin.physics.regions import Labels, Mask, Region

__all__ = ["region_from_dict", "region_to_dict"]

#: A mask that claims more pixels than this is not unpacked (a hostile file could claim anything).
LARGEST_MASK = 2_000_000_000


def _kinds() -> dict[str, type[Region]]:
    found = (getattr(regions, name) for name in regions.__all__)
    return {
        kind.kind: kind
        for kind in found
        if isinstance(kind, type) and issubclass(kind, Region) and kind is not Region
    }


def region_to_dict(region: Region) -> dict[str, Any]:
    """Return a region as a dictionary of numbers and text; defaults are left out.

    >>> region_to_dict(regions.Disc((1.0, 2.0), 3.0, z_mm=4.0, name="water"))
    {'kind': 'disc', 'center_mm': [1.0, 2.0], 'radius_mm': 3.0, 'z_mm': 4.0, 'name': 'water'}
    """
    found: dict[str, Any] = {"kind": region.kind}
    late = {"z_mm", "name", "group", "code", "values"}
    ordered = sorted(fields(region), key=lambda field: field.name in late)
    for field in ordered:
        value = getattr(region, field.name)
        if isinstance(value, np.ndarray):
            found[field.name] = _pack(value)
        elif field.name == "values" and value is not None:
            found["values"] = [end if math.isfinite(end) else None for end in value]
        elif field.default is MISSING or value != field.default:
            found[field.name] = _plain(value)
    return found


def region_from_dict(given: Any) -> Region:
    """Return the region that a dictionary describes.

    Raises
    ------
    RegionError
        If the kind is unknown, a field is missing or unknown, or a value breaks the region's rules.

    Examples
    --------
    >>> region_from_dict({"kind": "disc", "center_mm": [1, 2], "radius_mm": 3}).area_mm2 > 28
    True
    """
    if not isinstance(given, dict):
        raise RegionError("region", "must be a set of named values", given)
    kinds = _kinds()
    kind = given.get("kind")
    if kind not in kinds:
        raise RegionError("kind", f"must be one of {', '.join(kinds)}", kind)
    wanted = {field.name: field for field in fields(kinds[kind])}
    values = {name: value for name, value in given.items() if name != "kind"}
    for name, value in values.items():
        if name not in wanted:
            raise RegionError(name, f"must be one of {', '.join(wanted)} for a {kind}", value)
    for name, field in wanted.items():
        if name not in values and field.default is MISSING:
            raise RegionError(name, f"must be given for a {kind}", None)
    if values.get("values") is not None:
        values["values"] = _open_range(values["values"])
    if kinds[kind] is Mask:
        values["inside"] = _unpack(values["inside"])
    if kinds[kind] is Labels:
        values["labels"] = _unpack_labels(values["labels"])
        for name in ("names", "codes"):
            values[name] = _texts(name, values.get(name, ()))
    made = {name: _typed(name, value) for name, value in values.items()}
    return kinds[kind](**made)


def _plain(value: Any) -> Any:
    if isinstance(value, tuple):
        return [_plain(part) for part in value]
    return float(value) if isinstance(value, np.floating) else value


def _typed(name: str, value: Any) -> Any:
    """Turn lists into tuples and numbers into floats; anything else is refused by name."""
    if isinstance(value, np.ndarray) or value is None or name in ("names", "codes"):
        return value
    if name in ("name", "group", "code"):
        if not isinstance(value, str):
            raise RegionError(name, "must be text", value)
        return value
    if isinstance(value, bool) or not isinstance(value, int | float | list | tuple):
        raise RegionError(name, "must be a number or numbers", value)
    if isinstance(value, list | tuple):
        return tuple(_typed(name, part) for part in value)
    return float(value)


def _open_range(given: Any) -> tuple[float, float]:
    """Return a range whose missing ends are infinite."""
    if not isinstance(given, list | tuple) or len(given) != 2:
        raise RegionError("values", "must be two numbers, the lowest and the highest", given)
    low, high = given
    return -math.inf if low is None else low, math.inf if high is None else high


def _texts(name: str, given: Any) -> tuple[tuple[int, str], ...]:
    """Return what labels are called: pairs of a label and a text."""
    rule = "must be pairs of a label and a text"
    if not isinstance(given, list | tuple):
        raise RegionError(name, rule, given)
    found = []
    for pair in given:
        if not isinstance(pair, list | tuple) or len(pair) != 2:
            raise RegionError(name, rule, pair)
        number, text = pair
        if isinstance(number, bool) or not isinstance(number, int) or not isinstance(text, str):
            raise RegionError(name, rule, pair)
        found.append((number, text))
    return tuple(found)


def _pack(mask: np.ndarray[Any, Any]) -> dict[str, Any]:
    if mask.dtype != np.bool_:
        small = mask.astype(np.min_scalar_type(int(mask.max(initial=0))), copy=False)
        whole = small if int(mask.min(initial=0)) >= 0 else mask.astype(np.int64)
        data = whole.astype(whole.dtype.newbyteorder("<")).tobytes()
        numbers = base64.b64encode(zlib.compress(data, 6)).decode()
        return {"shape": list(mask.shape), "type": whole.dtype.str[1:], "numbers": numbers}
    bits = np.packbits(mask.ravel()).tobytes()
    return {"shape": list(mask.shape), "bits": base64.b64encode(zlib.compress(bits, 6)).decode()}


def _unpack(given: Any) -> np.ndarray[Any, np.dtype[np.bool_]]:
    shape, data = _unpacked("inside", given, "bits", 1)
    count = int(np.prod(shape))
    flat = np.unpackbits(np.frombuffer(data, np.uint8), count=count)
    return flat.astype(bool).reshape(shape)


def _unpack_labels(given: Any) -> np.ndarray[Any, Any]:
    kind = given.get("type") if isinstance(given, dict) else None
    if kind not in ("u1", "u2", "u4", "u8", "i8"):
        raise RegionError("labels", _PACKED, kind)
    shape, data = _unpacked("labels", given, "numbers", 8 * int(kind[1:]))
    return np.frombuffer(data, f"<{kind}").reshape(shape).astype(kind)


_PACKED = "must hold the shape and the packed pixels that this program wrote"


def _unpacked(name: str, given: Any, key: str, bits: int) -> tuple[tuple[int, ...], bytes]:
    """Return the shape and the bytes of pixels of so many bits; never more than they can be."""
    try:
        shape = tuple(int(n) for n in given["shape"])
        count = int(np.prod(shape, dtype=object))
        if len(shape) not in (2, 3) or min(shape) < 1 or count > LARGEST_MASK:
            raise RegionError(name, _PACKED, shape)
        size = (count * bits + 7) // 8
        data = zlib.decompressobj().decompress(base64.b64decode(given[key]), size + 1)
    except (KeyError, TypeError, ValueError, OverflowError, binascii.Error, zlib.error):
        raise RegionError(name, _PACKED, type(given).__name__) from None
    if len(data) != size:
        raise RegionError(name, _PACKED, f"{len(data)} bytes for shape {shape}")
    return shape, data
