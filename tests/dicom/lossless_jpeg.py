"""A small encoder of lossless JPEG frames (ITU-T T.81, annex H), for want of one in the wheels.

One component, restart-free, one Huffman table whose code words all have five bits (T.81 allows any
table that is complete enough and leaves the all-ones word free).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

CATEGORIES = 17


def encode(plane: NDArray[np.uint16], *, precision: int, predictor: int) -> bytes:
    """Return the frame of a plane of unsigned values below 2**precision."""
    rows, columns = plane.shape
    head = b"\xff\xd8"
    head += _segment(
        0xC3,
        bytes([precision])
        + rows.to_bytes(2, "big")
        + columns.to_bytes(2, "big")
        + b"\x01\x01\x11\x00",
    )
    counts = [0, 0, 0, 0, CATEGORIES] + [0] * 11
    head += _segment(0xC4, bytes([0, *counts, *range(CATEGORIES)]))
    head += _segment(0xDA, bytes([1, 1, 0, predictor, 0, 0]))
    differences = (plane.astype(np.int64) - predicted(plane, precision, predictor)) % 65536
    return head + _entropy_coded(differences.ravel().tolist()) + b"\xff\xd9"


def predicted(plane: NDArray[np.uint16], precision: int, predictor: int) -> NDArray[np.int64]:
    """Return the prediction of each pixel (T.81, table H.1 and H.1.1)."""
    x = plane.astype(np.int64)
    a = np.roll(x, 1, axis=1)
    b = np.roll(x, 1, axis=0)
    c = np.roll(b, 1, axis=1)
    chosen = {1: a, 2: b, 3: c, 4: a + b - c, 5: a + (b - c >> 1), 6: b + (a - c >> 1)}
    chosen[7] = a + b >> 1
    result = chosen[predictor].copy()
    result[:, 0] = b[:, 0]
    result[0, :] = a[0, :]
    result[0, 0] = 1 << (precision - 1)
    return result


def _segment(marker: int, body: bytes) -> bytes:
    return bytes([0xFF, marker]) + (len(body) + 2).to_bytes(2, "big") + body


def _entropy_coded(differences: list[int]) -> bytes:
    bits: list[str] = []
    for modulo in differences:
        difference = modulo - 65536 if modulo > 32768 else modulo
        category = abs(difference).bit_length() if difference != 32768 else 16
        bits.append(f"{category:05b}")
        if 0 < category < 16:
            value = difference if difference > 0 else difference + (1 << category) - 1
            bits.append(f"{value:0{category}b}")
    stream = "".join(bits)
    stream += "1" * (-len(stream) % 8)
    raw = int(stream, 2).to_bytes(len(stream) // 8, "big")
    return raw.replace(b"\xff", b"\xff\x00")
