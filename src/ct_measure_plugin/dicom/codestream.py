"""The size and depth a compressed frame declares, read before a decoder may allocate for it.

A damaged stream can claim a plane of four thousand million pixels; decoders believe it. Only the
marker segments up to the frame header are looked at: ISO/IEC 10918-1 B.2.2 (JPEG), ISO/IEC 14495-1
C.2.2 (JPEG-LS), ISO/IEC 15444-1 A.5.1 and A.6.1 (JPEG 2000).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

__all__ = ["Codestream", "codestream_of"]

_START_OF_FRAME: Final = frozenset({0xC0, 0xC1, 0xC2, 0xC3, 0xC5, 0xC6, 0xC7, 0xF7})
_START_OF_SCAN: Final = 0xDA
_BARE: Final = frozenset({0x01, 0xD8, *range(0xD0, 0xD8)})


@dataclass(frozen=True, slots=True)
class Codestream:
    """What a frame declares.

    Attributes
    ----------
    rows, columns, components, precision : int
        Its plane.
    signed : bool
        Whether it holds two's complement (JPEG 2000 only).
    exact : bool or None
        False if it is certainly lossy, True if certainly not, None if it does not say.
    """

    rows: int
    columns: int
    components: int
    precision: int
    signed: bool = False
    exact: bool | None = None


def codestream_of(data: bytes) -> Codestream | None:
    """Return what a JPEG, JPEG-LS or JPEG 2000 frame declares, None if it is none of them."""
    if data[:4] == b"\xff\x4f\xff\x51":
        return _jpeg_2000(data)
    if data[:2] == b"\xff\xd8":
        return _jpeg(data)
    return None


def _jpeg_2000(data: bytes) -> Codestream | None:
    if len(data) < 43:
        return None
    long = int.from_bytes
    x1, y1, x0, y0 = (long(data[at : at + 4], "big") for at in (8, 12, 16, 20))
    components, depth = long(data[40:42], "big"), data[42]
    exact: bool | None = None
    position = 4 + long(data[4:6], "big")
    while position + 4 <= len(data) and data[position] == 0xFF and data[position + 1] != 0x90:
        if data[position + 1] == 0x52 and position + 14 <= len(data):
            # COD: the last byte of its fixed part names the wavelet, 0 is the irreversible 9/7
            exact = None if data[position + 13] == 1 else False
            break
        position += 2 + long(data[position + 2 : position + 4], "big")
    return Codestream(
        rows=y1 - y0,
        columns=x1 - x0,
        components=components,
        precision=(depth & 0x7F) + 1,
        signed=bool(depth & 0x80),
        exact=exact,
    )


def _jpeg(data: bytes) -> Codestream | None:
    frame: tuple[int, int, int, int, int] | None = None
    position = 2
    while position + 4 <= len(data):
        if data[position] != 0xFF:
            break
        marker = data[position + 1]
        if marker == 0xFF or marker in _BARE:
            position += 1 if marker == 0xFF else 2
            continue
        length = int.from_bytes(data[position + 2 : position + 4], "big")
        body = data[position + 4 : position + 2 + length]
        if marker in _START_OF_FRAME and len(body) >= 6:
            rows, columns = int.from_bytes(body[1:3], "big"), int.from_bytes(body[3:5], "big")
            frame = (marker, rows, columns, body[5], body[0])
        if marker == _START_OF_SCAN:
            return _jpeg_frame(frame, body)
        position += 2 + max(length, 2)
    return None


def _jpeg_frame(frame: tuple[int, int, int, int, int] | None, scan: bytes) -> Codestream | None:
    if frame is None:
        return None
    marker, rows, columns, components, precision = frame
    # JPEG-LS: the third byte of the scan header from its end is the allowed error
    near_zero = len(scan) >= 3 and scan[-3] == 0
    exact = near_zero if marker == 0xF7 else marker in (0xC3, 0xC7)
    return Codestream(rows, columns, components, precision, exact=exact)
