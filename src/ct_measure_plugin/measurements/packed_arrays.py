"""Arrays as JSON holds them: short ones readable, others packed; the same to the last bit."""

from __future__ import annotations

import base64
import zlib
from typing import Any

import numpy as np

__all__ = ["packed", "unpacked"]


def packed(array: np.ndarray[Any, Any]) -> dict[str, Any]:
    """Return an array as a dictionary; short finite arrays stay readable, others are packed.

    >>> packed(np.array([1.5, 2.0]))
    {'is': 'array', 'dtype': '<f8', 'shape': [2], 'values': [1.5, 2.0]}
    """
    head = {"is": "array", "dtype": array.dtype.str, "shape": list(array.shape)}
    if array.ndim == 1 and array.size <= 4096 and bool(np.all(np.isfinite(array))):
        return {**head, "values": array.tolist()}
    inside = zlib.compress(np.ascontiguousarray(array).tobytes(), 6)
    return {**head, "packed": base64.b64encode(inside).decode()}


def unpacked(given: dict[str, Any]) -> np.ndarray[Any, Any]:
    """Return the array of a dictionary from :func:`packed`.

    Raises
    ------
    KeyError, TypeError, ValueError, zlib.error
        If it is none.

    Examples
    --------
    >>> unpacked(packed(np.eye(2, dtype=np.float32))).tolist()
    [[1.0, 0.0], [0.0, 1.0]]
    """
    dtype, shape = np.dtype(str(given["dtype"])), tuple(int(n) for n in given["shape"])
    if dtype.kind not in "iufb":
        raise TypeError(str(dtype))
    if "values" in given:
        return np.asarray(given["values"], dtype=dtype).reshape(shape)
    size = int(np.prod(shape, dtype=object)) * dtype.itemsize
    data = zlib.decompressobj().decompress(base64.b64decode(given["packed"]), size + 1)
    return np.frombuffer(data, dtype=dtype).reshape(shape).copy()
