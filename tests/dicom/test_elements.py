"""The header index says what the DICOM library says, and never reads past the bytes there are."""

from __future__ import annotations

import math
import struct

import pytest
import series_writer as sw
from pydicom import dcmread

from ct_measure_plugin.dicom import tags
from ct_measure_plugin.dicom.elements import (
    MAX_DEPTH,
    BrokenHeaderError,
    Encoding,
    ShortHeaderError,
    index_elements,
)
from ct_measure_plugin.dicom.header import read_header
from ct_measure_plugin.dicom.texts import shown_text

STORED = sw.noise((3, 8, 8))


@pytest.mark.parametrize("syntax", sw.NATIVE)
@pytest.mark.parametrize("kind", ["classic", "enhanced"])
def test_every_wanted_element_is_as_the_library_reads_it(tmp_path, syntax, kind):
    ds = (
        sw.ct_slice(STORED[0], CTDIvol=3.25, WindowCenter=["1", "2"], WindowWidth=["3", "4"])
        if kind == "classic"
        else sw.enhanced(STORED, sw.line(3))
    )
    file = sw.save(ds, tmp_path / "one", sw.NATIVE[syntax])
    elements = read_header(file).elements
    told = dcmread(file)
    checked = 0
    for tag in tags.VR_OF:
        if tag not in told:
            assert tag not in elements
            continue
        value = told[tag].value
        if told[tag].VR in ("DS", "IS", "US", "FD", "UL"):
            values = [value] if told[tag].VM == 1 else list(value)
            assert elements.numbers(tag) == tuple(float(v) for v in values)
        else:
            text = value if told[tag].VM == 1 else "\\".join(value)
            assert elements.text(tag) == text
        checked += 1
    assert checked > 15
    for tag in tags.SEQUENCES:
        assert len(elements.items.get(tag, [])) == (len(told[tag].value) if tag in told else 0)


def element(group, number, vr, value):
    head = struct.pack("<HH2s", group, number, vr)
    if vr in (b"OB", b"OW", b"SQ", b"UN"):
        return head + b"\0\0" + struct.pack("<L", len(value)) + value
    return head + struct.pack("<H", len(value)) + value


ROWS = element(0x0028, 0x0010, b"US", b"\x08\0")


def test_nested_sequences_of_undefined_length_are_passed():
    inner = b"\xfe\xff\x00\xe0\xff\xff\xff\xff" + ROWS + b"\xfe\xff\x0d\xe0\0\0\0\0"
    sequence = struct.pack("<HH2sHL", 0x0040, 0x0275, b"SQ", 0, 0xFFFFFFFF)
    data = sequence + inner + b"\xfe\xff\xdd\xe0\0\0\0\0" + element(0x50, 1, b"LO", b"ab")
    elements = index_elements(data, 0, Encoding())
    assert tags.ROWS not in elements  # that of the item is not that of the image


def test_private_sequences_of_unknown_kind_are_passed():
    inside = struct.pack("<HHL", 0x0028, 0x0010, 2) + b"\x08\0"
    item = b"\xfe\xff\x00\xe0" + struct.pack("<L", len(inside)) + inside
    unknown = struct.pack("<HH2sHL", 0x0019, 0x1001, b"UN", 0, 0xFFFFFFFF)
    data = unknown + item + b"\xfe\xff\xdd\xe0\0\0\0\0" + ROWS
    assert index_elements(data, 0, Encoding()).whole(tags.ROWS) == 8


def test_nesting_has_an_end():
    opening = struct.pack("<HH2sHL", 0x0040, 0x0275, b"SQ", 0, 0xFFFFFFFF)
    opening += b"\xfe\xff\x00\xe0\xff\xff\xff\xff"
    with pytest.raises(BrokenHeaderError):
        index_elements(opening * (MAX_DEPTH + 2), 0, Encoding())


def test_a_sequence_of_very_many_items_is_refused():
    """Eight bytes of file must not become hundreds of bytes of memory without end."""
    empty_item = b"\xfe\xff\x00\xe0\0\0\0\0"
    data = element(0x5200, 0x9230, b"SQ", empty_item * 300_000)
    with pytest.raises(BrokenHeaderError):
        index_elements(data, 0, Encoding())


@pytest.mark.parametrize("length", [0xFFFF, 3])
def test_lengths_beyond_the_bytes_are_short(length):
    data = struct.pack("<HH2sH", 0x0028, 0x0010, b"US", length) + b"\x08\0"
    with pytest.raises(ShortHeaderError):
        index_elements(data, 0, Encoding())


@pytest.mark.parametrize(
    ("raw", "numbers"),
    [
        (b"1.5\\-2e3 ", (1.5, -2000)),
        (b" 7\0", (7,)),
        (b"inf\\nan\\1e999", (None, None, None)),
        (b"1,5", (None,)),
        (b"", (None,)),
        (b"\\", (None, None)),
    ],
)
def test_decimal_text_becomes_finite_numbers_or_none(raw, numbers):
    data = element(0x0028, 0x0030, b"DS", raw)
    assert index_elements(data, 0, Encoding()).numbers(tags.PIXEL_SPACING) == numbers


def test_binary_numbers_that_are_not_finite_are_none():
    data = element(0x0018, 0x9345, b"FD", struct.pack("<dd", math.nan, 2.5))
    assert index_elements(data, 0, Encoding()).numbers(tags.CTDI_VOL) == (None, 2.5)


def test_text_for_the_screen_is_one_printable_line():
    assert shown_text(b"a\x1b[31mb\r\nc\x00" + b"x" * 200, "")[:9] == "a [31mb c"
    assert len(shown_text(b"x" * 200, "")) == 64
