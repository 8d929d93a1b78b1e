"""How the pixels of an image are stored: size of the plane, bits, sign, byte order."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Final

from ct_measure_plugin.dicom import tags
from ct_measure_plugin.dicom.elements import Elements
from ct_measure_plugin.dicom.header import UnreadableFileError

__all__ = ["PixelLayout", "layout_of"]

#: the largest plane this room decodes: 8192 × 8192; real CT planes end at 4096 × 4096
MAX_PLANE_PIXELS: Final = 1 << 26


@dataclass(frozen=True, slots=True)
class PixelLayout:
    """How a pixel is stored (PS3.5, 8.1).

    Attributes
    ----------
    rows, columns : int
        Size of the plane.
    allocated, stored, high_bit : int
        Bits of a cell, bits in use, and the position of the highest of these.
    signed : bool
        Two's complement or unsigned.
    big : bool
        Most significant byte first.
    """

    rows: int
    columns: int
    allocated: int
    stored: int
    high_bit: int
    signed: bool
    big: bool = False

    @property
    def plane_bytes(self) -> int:
        """Bytes of one uncompressed plane."""
        return self.rows * self.columns * self.allocated // 8

    @property
    def limits(self) -> tuple[int, int]:
        """Lowest and highest value that can be stored."""
        if self.signed:
            return -(1 << (self.stored - 1)), (1 << (self.stored - 1)) - 1
        return 0, (1 << self.stored) - 1


def layout_of(elements: Elements) -> PixelLayout:
    """Return how the pixels of a file are stored.

    Raises
    ------
    UnreadableFileError
        If size, depth or kind of pixel are missing, or are none that a CT image can have.
    """
    whole = elements.whole
    if tags.FLOAT_PIXELS in elements or tags.DOUBLE_PIXELS in elements:
        raise UnreadableFileError("floating-point pixels: not a CT image", stray=True)
    if tags.PIXELS not in elements:
        raise UnreadableFileError("no pixel data")
    rows, columns = whole(tags.ROWS), whole(tags.COLUMNS)
    if not rows or not columns or rows < 0 or columns < 0:
        raise UnreadableFileError("rows or columns are missing")
    if rows * columns > MAX_PLANE_PIXELS:
        raise UnreadableFileError(f"{rows} × {columns} pixels are more than a CT image can have")
    samples = whole(tags.SAMPLES)
    if samples not in (None, 1) or elements.text(tags.PHOTOMETRIC) not in (
        "",
        "MONOCHROME1",
        "MONOCHROME2",
    ):
        raise UnreadableFileError("a colour picture, not a CT image", stray=True)
    allocated = whole(tags.BITS_ALLOCATED)
    stored = whole(tags.BITS_STORED) or allocated
    if allocated not in (8, 16, 32) or stored is None or not 1 <= stored <= allocated:
        raise UnreadableFileError("bits allocated and stored are missing or impossible")
    high = whole(tags.HIGH_BIT)
    if high is None or not stored - 1 <= high < allocated:
        high = stored - 1
    signed = whole(tags.PIXEL_SIGN) == 1
    return _layout(rows, columns, allocated, stored, high, signed, elements.encoding.big)


@lru_cache(maxsize=256)
def _layout(*values: int) -> PixelLayout:
    rows, columns, allocated, stored, high, signed, big = values
    return PixelLayout(rows, columns, allocated, stored, high, bool(signed), bool(big))
