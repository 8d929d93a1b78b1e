"""Stored values of one image: from the file into an array, with only the bits in use."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.dicom.encapsulated import decoded_plane
from ct_measure_plugin.dicom.header import FIRST_READ, UnreadableFileError, inflate
from ct_measure_plugin.dicom.syntaxes import DEFLATED, SYNTAXES
from ct_measure_plugin.errors import SeriesError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.dicom.facts import ImageFacts
    from ct_measure_plugin.dicom.layout import PixelLayout

__all__ = ["stored_into", "stored_plane"]


def stored_into(image: ImageFacts, target: NDArray[np.int16]) -> tuple[int, int, bool | None]:
    """Fill a plane of 16 bit cells with stored values.

    Parameters
    ----------
    image : ImageFacts
        An image of at most 16 bits.
    target : ndarray of int16, shape (rows, columns), contiguous
        Is overwritten. Unsigned values above 32767 appear wrapped: view it as uint16.

    Returns
    -------
    low, high : int
        The lowest and highest stored value.
    exact : bool or None
        False if the pixel stream is lossy, None if it does not say.

    Raises
    ------
    SeriesError
        If the pixels cannot be read.
    """
    exact: bool | None = True
    layout = image.layout
    native = not SYNTAXES[image.syntax_uid].encapsulated
    if native and layout.allocated == 16 and image.syntax_uid != DEFLATED:
        _read_into(image, target)
        if layout.big:
            target.byteswap(inplace=True)
    else:
        plane, exact = stored_plane(image)
        target[...] = (
            plane.astype(np.int16, copy=False)
            if plane.dtype.itemsize == 1
            else (plane.view(np.int16))
        )
    low, high = settle_bits(target, layout)
    return low, high, exact


def _read_into(image: ImageFacts, target: NDArray[np.int16]) -> None:
    """Read an uncompressed plane straight into its place; no byte is copied twice."""
    view = memoryview(target.reshape(-1).view(np.uint8).data)
    with open(image.path, "rb", buffering=0) as file:
        file.seek(image.plane_offset)
        done = 0
        while done < len(view):
            got = file.readinto(view[done:])
            if not got:
                raise SeriesError("a file became shorter while it was read")
            done += got


def stored_plane(image: ImageFacts) -> tuple[NDArray[Any], bool | None]:
    """Return one plane in the cells it is stored in (unsigned), in the machine's byte order."""
    if SYNTAXES[image.syntax_uid].encapsulated:
        return decoded_plane(image)
    layout = image.layout
    raw = _native_bytes(image)
    if len(raw) < layout.plane_bytes:
        raise SeriesError("the pixel data are cut short")
    order = ">" if layout.big else "<"
    plane = np.frombuffer(raw, f"{order}u{layout.allocated // 8}", layout.rows * layout.columns)
    native: NDArray[Any] = plane.astype(plane.dtype.newbyteorder("="))
    return native.reshape(layout.rows, layout.columns), True


def _native_bytes(image: ImageFacts) -> bytes:
    start, length = image.plane_offset, image.layout.plane_bytes
    with open(image.path, "rb", buffering=0) as file:
        if image.syntax_uid != DEFLATED:
            file.seek(start)
            return file.read(length)
        packed = file.read()
    try:
        return inflate(packed[_deflated_start(packed) :], start + length)[start:]
    except UnreadableFileError as problem:
        raise SeriesError(problem.reason) from None


def _deflated_start(packed: bytes) -> int:
    from ct_measure_plugin.dicom.header import data_set_start

    return data_set_start(packed[: FIRST_READ * 4])


def settle_bits(plane: NDArray[np.int16], layout: PixelLayout) -> tuple[int, int]:
    """Leave only the bits in use, sign-extended, in place; return lowest and highest value.

    Cells wider than the stored bits may carry an overlay above them, or negative numbers that were
    never sign-extended (PS3.5, 8.1.1); a lone negative number among unsigned ones is a fill and is
    kept as it is.
    """
    cells: NDArray[Any] = plane if layout.signed else plane.view(np.uint16)
    if layout.allocated == 8:
        return _settle_bytes(plane, layout)
    above = layout.allocated - layout.stored
    low, high = int(cells.min()), int(cells.max())
    if above == 0:
        return low, high
    floor, ceiling = layout.limits
    if layout.high_bit == layout.stored - 1:
        if floor <= low and high <= ceiling:
            return low, high
        fills = plane[(cells < floor) | (cells > ceiling)]
        lowest_fill = int(fills.min())
        if lowest_fill < 0 and lowest_fill == int(fills.max()):
            return min(int(plane.min()), low), int(plane.max())
    np.left_shift(cells, layout.allocated - 1 - layout.high_bit, out=cells)
    np.right_shift(cells, above, out=cells)
    return int(cells.min()), int(cells.max())


def _settle_bytes(plane: NDArray[np.int16], layout: PixelLayout) -> tuple[int, int]:
    up = 15 - layout.high_bit
    if layout.signed:
        np.left_shift(plane, up, out=plane)
        np.right_shift(plane, 16 - layout.stored, out=plane)
    elif layout.stored < 8:
        cells = plane.view(np.uint16)
        np.left_shift(cells, up, out=cells)
        np.right_shift(cells, 16 - layout.stored, out=cells)
    return int(plane.min()), int(plane.max())
