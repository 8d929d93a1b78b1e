"""From a file to the index of its header, reading no more bytes than that needs."""

from __future__ import annotations

import os
import zlib
from dataclasses import dataclass
from typing import Final

from ct_measure_plugin.dicom import tags
from ct_measure_plugin.dicom.elements import (
    BrokenHeaderError,
    Elements,
    Encoding,
    ShortHeaderError,
    index_elements,
)
from ct_measure_plugin.dicom.syntaxes import (
    DEFLATED,
    EXPLICIT_BIG,
    EXPLICIT_LITTLE,
    IMPLICIT_LITTLE,
)
from ct_measure_plugin.dicom.texts import digest_of

__all__ = ["Header", "UnreadableFileError", "data_set_start", "inflate", "read_header"]

#: one read covers the header of nearly every single-slice file
FIRST_READ: Final = 1 << 15
#: functional groups of ten thousand frames take some 16 MB; beyond this a header is hostile
LARGEST_HEADER: Final = 1 << 26
_KNOWN_VRS: Final = frozenset(
    b"AE AS AT CS DA DS DT FL FD IS LO LT OB OD OF OL OV OW PN SH SL SQ SS ST SV TM UC UI UL UN "
    b"UR US UT UV".split()
)


class UnreadableFileError(Exception):
    """One file cannot be used; the text is the reason, free of DICOM text. Stays in the room.

    Attributes
    ----------
    stray : bool
        True if the file is simply something else, False if it is a damaged image.
    series_digest : str
        The series it says it belongs to, as far as that is known.
    """

    def __init__(self, reason: str, *, stray: bool = False, series_digest: str = "") -> None:
        super().__init__(reason)
        self.reason = reason
        self.stray = stray
        self.series_digest = series_digest


@dataclass(frozen=True, slots=True)
class Header:
    """A file's header.

    Attributes
    ----------
    elements : Elements
        The wanted elements.
    syntax_uid : str
        The transfer syntax, guessed if the file does not say.
    size : int
        The file's length in bytes.
    headerless : bool
        True if preamble or file meta information were absent.
    """

    elements: Elements
    syntax_uid: str
    size: int
    headerless: bool

    @property
    def deflated(self) -> bool:
        """True if offsets count in the inflated data set, not in the file."""
        return self.syntax_uid == DEFLATED


def read_header(path: str | os.PathLike[str], wanted: frozenset[int] = tags.WANTED) -> Header:
    """Read and index a file's header.

    Parameters
    ----------
    path : path
        The file.
    wanted : frozenset of int
        The tags to keep; by default those that reading a series needs.

    Raises
    ------
    UnreadableFileError
        If the file is not DICOM, or its header is damaged.
    OSError
        If the file cannot be opened or read.
    """
    with open(path, "rb", buffering=0) as file:
        size = os.fstat(file.fileno()).st_size
        data = file.read(FIRST_READ)
        if not data:
            raise UnreadableFileError("the file is empty", stray=True)
        while True:
            try:
                return _header_of(data, size, wanted)
            except ShortHeaderError as problem:
                if len(data) >= min(size, LARGEST_HEADER):
                    raise _damaged(_short_reason(size), problem.seen) from None
                data += _read_up_to(file, min(len(data) * 7, LARGEST_HEADER - len(data)))
            except BrokenHeaderError as problem:
                raise _damaged(f"the header is damaged: {problem}", problem.seen) from None


def _read_up_to(file: object, count: int) -> bytes:
    read = file.read  # type: ignore[attr-defined]
    more: bytes = read(count)
    if not more:
        raise UnreadableFileError("the file became shorter while it was read")
    return more


def _damaged(reason: str, seen: Elements | None) -> UnreadableFileError:
    """Return the error of a damaged file, told by what came before the damage."""
    if seen is None:
        return UnreadableFileError(reason)
    uid = seen.text(tags.SERIES_UID)
    modality = seen.text(tags.MODALITY)
    stray = bool(modality) and modality != "CT"
    return UnreadableFileError(reason, stray=stray, series_digest=digest_of(uid) if uid else "")


def _short_reason(size: int) -> str:
    if size > LARGEST_HEADER:
        return f"the header is longer than {LARGEST_HEADER >> 20} MB"
    return "the file is cut short inside its header"


def _header_of(data: bytes, size: int, wanted: frozenset[int]) -> Header:
    if data[128:132] == b"DICM":
        return _conformant(data, 132, size, wanted)
    if data[:8].startswith(b"\x02\x00\x00\x00UL"):  # file meta without a preamble
        return _conformant(data, 0, size, wanted, headerless=True)
    return _bare(data, size, wanted)


def _conformant(
    data: bytes, start: int, size: int, wanted: frozenset[int], *, headerless: bool = False
) -> Header:
    """Index a file that has file meta information."""
    syntax_uid, body = _file_meta(data, start)
    if not syntax_uid:
        syntax_uid, headerless = _guess_syntax(data, body), True
    if syntax_uid == DEFLATED:
        return _deflated(data, body, size, wanted, headerless=headerless)
    encoding = _encoding_of(syntax_uid, data, body)
    elements = index_elements(data, body, encoding, wanted)
    return Header(elements, syntax_uid, size, headerless)


def _file_meta(data: bytes, start: int) -> tuple[str, int]:
    """Return the transfer syntax and where the data set begins."""
    position, uid = start, ""
    while data[position : position + 2] == b"\x02\x00":
        vr = data[position + 4 : position + 6]
        if vr in (b"OB", b"UN", b"UT"):
            length = int.from_bytes(data[position + 8 : position + 12], "little")
            value = position + 12
        else:
            length = int.from_bytes(data[position + 6 : position + 8], "little")
            value = position + 8
        if value + length > len(data):
            raise ShortHeaderError
        if data[position + 2 : position + 4] == b"\x10\x00":
            uid = data[value : value + length].decode("latin-1").strip(" \0")
        position = value + length
    if position + 8 > len(data):
        raise ShortHeaderError
    return uid, position


def data_set_start(data: bytes) -> int:
    """Return where the data set begins in a file that has file meta information."""
    return _file_meta(data, 132 if data[128:132] == b"DICM" else 0)[1]


def _encoding_of(syntax_uid: str, data: bytes, body: int) -> Encoding:
    """Return the encoding, believing the first element's bytes over the declaration."""
    explicit = data[body + 4 : body + 6] in _KNOWN_VRS
    big = syntax_uid == EXPLICIT_BIG and explicit and data[body] == 0
    return Encoding(implicit=not explicit, big=big)


def _guess_syntax(data: bytes, body: int) -> str:
    explicit = data[body + 4 : body + 6] in _KNOWN_VRS
    if not explicit:
        return IMPLICIT_LITTLE
    return EXPLICIT_BIG if data[body] == 0 else EXPLICIT_LITTLE


def _bare(data: bytes, size: int, wanted: frozenset[int]) -> Header:
    """Index a file that starts with its data set; refuse it unless it is unambiguous."""
    group = data[:2]
    if group not in (b"\x08\x00", b"\x00\x08") or len(data) < 16:
        raise UnreadableFileError("not a DICOM file", stray=True)
    syntax_uid = _guess_syntax(data, 0)
    encoding = Encoding(implicit=syntax_uid == IMPLICIT_LITTLE, big=syntax_uid == EXPLICIT_BIG)
    try:
        elements = index_elements(data, 0, encoding, wanted)
    except BrokenHeaderError:
        raise UnreadableFileError("not a DICOM file", stray=True) from None
    except ShortHeaderError:
        if len(data) < min(size, LARGEST_HEADER):
            raise
        raise UnreadableFileError("not a DICOM file", stray=True) from None
    if tags.SOP_CLASS not in elements and tags.MODALITY not in elements:
        raise UnreadableFileError("not a DICOM file", stray=True)
    return Header(elements, syntax_uid, size, headerless=True)


def _deflated(
    data: bytes, body: int, size: int, wanted: frozenset[int], *, headerless: bool
) -> Header:
    """Index a deflated data set, inflating no more than the header needs."""
    limit = FIRST_READ
    while True:
        plain = inflate(data[body:], limit)
        try:
            elements = index_elements(plain, 0, _encoding_of(DEFLATED, plain, 0), wanted)
        except ShortHeaderError:
            if len(plain) < limit:  # all that these bytes hold
                raise
            if limit >= LARGEST_HEADER:
                raise UnreadableFileError(_short_reason(LARGEST_HEADER + 1)) from None
            limit *= 8
            continue
        return Header(elements, DEFLATED, size, headerless)


def inflate(data: bytes, limit: int) -> bytes:
    """Return at most `limit` bytes of a deflated data set.

    Raises
    ------
    UnreadableFileError
        If the stream is damaged.
    """
    try:
        return zlib.decompressobj(-zlib.MAX_WBITS).decompress(data, limit)
    except zlib.error:
        raise UnreadableFileError("the deflated data set is damaged") from None
