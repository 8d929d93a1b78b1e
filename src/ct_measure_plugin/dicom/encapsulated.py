"""Frames that are wrapped in fragments (PS3.5, A.4): finding them in the file, decoding them."""

from __future__ import annotations

import os
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from ct_measure_plugin.dicom.codestream import Codestream, codestream_of
from ct_measure_plugin.dicom.quiet import silenced
from ct_measure_plugin.dicom.syntaxes import SYNTAXES, installed, missing_decoder
from ct_measure_plugin.errors import DecoderMissingError, SeriesError

if TYPE_CHECKING:
    from typing import BinaryIO

    from numpy.typing import NDArray

    from ct_measure_plugin.dicom.facts import ImageFacts

__all__ = ["decoded_plane", "require_decoder"]

_ITEM: Final = b"\xfe\xff\x00\xe0"


@dataclass(frozen=True, slots=True)
class _Fragments:
    offset_table: tuple[int, ...]
    #: (offset of the item's tag counted from the first fragment, where the bytes are, how many)
    pieces: tuple[tuple[int, int, int], ...]


def require_decoder(syntax_uid: str) -> None:
    """Raise if a transfer syntax needs a package that is not installed.

    Raises
    ------
    DecoderMissingError
        Its text names the pip command.
    """
    syntax = SYNTAXES[syntax_uid]
    command = missing_decoder(syntax)
    if command:
        raise DecoderMissingError(
            f"the pixels are {syntax.name} and no decoder for it is installed: {command}"
        )


def decoded_plane(image: ImageFacts) -> tuple[NDArray[Any], bool | None]:
    """Return one frame's stored values, and whether its stream is exact (None: does not say).

    Returns
    -------
    plane : ndarray of uint8, uint16 or uint32, shape (rows, columns)
        Signed values are two's complement of the array's own width.
    exact : bool or None
        As :class:`~ct_measure_plugin.dicom.codestream.Codestream` has it.

    Raises
    ------
    SeriesError
        If the frame is damaged or is not the plane its header declares.
    """
    require_decoder(image.syntax_uid)
    data = _frame_bytes(image)
    if SYNTAXES[image.syntax_uid].family == "rle":
        return _decoded(image, data, image.layout.allocated), True
    stream = codestream_of(data)
    _require_sound(image, data, stream)
    assert stream is not None  # noqa: S101 - checked in the line above
    plane = _decoded(image, data, 8 if stream.precision <= 8 else 16)
    if plane.dtype.itemsize == 1 and image.layout.allocated > 8:
        plane = plane.astype(np.uint16)
    if image.layout.signed and not stream.signed:
        _extend_sign(plane, stream.precision)
    return plane, stream.exact


def _require_sound(image: ImageFacts, data: bytes, stream: Codestream | None) -> None:
    layout = image.layout
    if stream is None:
        raise SeriesError("a compressed slice is damaged: its stream has no frame header")
    if (stream.rows, stream.columns, stream.components) != (layout.rows, layout.columns, 1):
        raise SeriesError("a compressed slice is damaged: its stream holds another plane")
    # some decoders fill what is cut off with made-up values; the end marker is on the last bytes,
    # before a little padding
    if b"\xff\xd9" not in data[-16:]:
        raise SeriesError("a compressed slice is damaged: its stream is cut short")
    if not 2 <= stream.precision <= 16:
        raise SeriesError("a compressed slice has more than 16 bits, which is not read here")


def _extend_sign(plane: NDArray[Any], bits: int) -> None:
    """Make two's complement of `bits` bits that of the whole cell, in place."""
    shift = plane.dtype.itemsize * 8 - bits
    if shift > 0:
        signed = plane.view(f"i{plane.dtype.itemsize}")
        np.left_shift(signed, shift, out=signed)
        np.right_shift(signed, shift, out=signed)


def _decoded(image: ImageFacts, data: bytes, allocated: int) -> NDArray[Any]:
    from pydicom.encaps import encapsulate
    from pydicom.pixels.decoders.base import get_decoder

    layout = image.layout
    options: dict[str, Any] = {
        "rows": layout.rows,
        "columns": layout.columns,
        "number_of_frames": 1,
        "samples_per_pixel": 1,
        "bits_allocated": allocated,
        "bits_stored": min(layout.stored, allocated),
        "pixel_representation": 0,
        "photometric_interpretation": "MONOCHROME2",
        "apply_j2k_sign_correction": False,
        "apply_jls_sign_correction": False,
        "correct_unused_bits": False,
    }
    try:
        with silenced():
            plane, _ = get_decoder(image.syntax_uid).as_array(
                encapsulate([data]),
                index=0,
                raw=True,
                validate=False,
                decoding_plugin=_plugin(image.syntax_uid),
                **options,
            )
    except MemoryError:
        raise
    except Exception as problem:  # decoders raise what they like; the text stays behind
        raise SeriesError("a compressed slice is damaged and cannot be decoded") from problem
    plane = np.asarray(plane)
    if plane.shape != (layout.rows, layout.columns):
        raise SeriesError("a compressed slice is damaged: its stream holds another plane")
    unsigned: NDArray[Any] = plane.view(f"u{plane.dtype.itemsize}")
    return unsigned


def _plugin(syntax_uid: str) -> str:
    """Return which decoder to use: one for each syntax, so that numbers do not depend on chance."""
    syntax = SYNTAXES[syntax_uid]
    if syntax.family == "rle":
        return "pydicom"
    return "pyjpegls" if installed(syntax) == "jpeg_ls" else "pylibjpeg"


def _frame_bytes(image: ImageFacts) -> bytes:
    with open(image.path, "rb") as file:
        fragments = _fragments_of(file, image)
        pieces = _pieces_of(fragments, image)
        parts = []
        for _, where, length in pieces:
            file.seek(where)
            parts.append(file.read(length))
    return b"".join(parts)


def _fragments_of(file: BinaryIO, image: ImageFacts) -> _Fragments:
    """List a file's fragments; each length is checked against the file."""
    size = os.fstat(file.fileno()).st_size
    position = image.pixel_offset
    table: tuple[int, ...] = ()
    pieces: list[tuple[int, int, int]] = []
    first = True
    base = position
    while position + 8 <= size:
        file.seek(position)
        head = file.read(8)
        length = int.from_bytes(head[4:], "little")
        if head[:4] != _ITEM:
            break
        if position + 8 + length > size:
            raise SeriesError("the compressed pixel data are cut short")
        if first:
            table, first = _offsets_in(file.read(length)), False
            base = position + 8 + length
        else:
            pieces.append((position - base, position + 8, length))
        position += 8 + length
    if not pieces:
        raise SeriesError("the compressed pixel data are missing")
    return _Fragments(table, tuple(pieces))


def _offsets_in(raw: bytes) -> tuple[int, ...]:
    return tuple(np.frombuffer(raw[: len(raw) // 4 * 4], "<u4").tolist())


def _pieces_of(fragments: _Fragments, image: ImageFacts) -> tuple[tuple[int, int, int], ...]:
    """Return the fragments of the image's frame."""
    pieces, frames = fragments.pieces, image.frame_count
    if frames == 1:
        return pieces
    if len(pieces) == frames:
        return (pieces[image.frame],)
    table = fragments.offset_table
    if len(table) != frames:
        raise SeriesError("the frames of a compressed file cannot be told apart")
    start = table[image.frame]
    stop = table[image.frame + 1] if image.frame + 1 < frames else 1 << 62
    chosen = tuple(piece for piece in pieces if start <= piece[0] < stop)
    if not chosen:
        raise SeriesError("the frames of a compressed file cannot be told apart")
    return chosen
