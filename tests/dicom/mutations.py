"""Damages files at random: what transfers, disks, bad writers and malice do to them."""

from __future__ import annotations

import io
import zlib
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from pydicom import dcmread

Rng = np.random.Generator

#: tag -> byte strings that some writer, or some bit error, might put there
NUMBERS = {
    0x00280010: "US",  # rows
    0x00280011: "US",  # columns
    0x00280002: "US",  # samples
    0x00280100: "US",  # bits allocated
    0x00280101: "US",  # bits stored
    0x00280102: "US",  # high bit
    0x00280103: "US",  # sign
    0x00280120: "US",  # padding
}
TEXTS = (
    0x00280008,  # frames
    0x00280030,  # pixel spacing
    0x00281052,  # intercept
    0x00281053,  # slope
    0x00200032,  # position
    0x00200037,  # orientation
    0x00180050,  # thickness
    0x00200011,  # series number
    0x00080060,  # modality
    0x00080016,  # object class
    0x00281054,  # rescale type
    0x00280004,  # photometric
)
ODD_NUMBERS = (0, 1, 2, 7, 8, 12, 15, 16, 17, 32, 64, 255, 4096, 8192, 32768, 65535)
ODD_TEXTS = (
    b"",
    b"nan",
    b"inf\\-inf",
    b"1e308",
    b"1e-308",
    b"-1",
    b"0",
    b"0\\0",
    b"0\\0\\0",
    b"1\\1\\1\\1\\1\\1",
    b"2147483648",
    b"99999999999",
    b"1,5",
    b"\\\\\\\\\\",
    b"\xff\xfe\x00\x1b[2J",
    b"%s%n{0}",
    b"../../..",
)


@dataclass(slots=True)
class Sample:
    """A valid file, and where its top-level elements are.

    Attributes
    ----------
    raw : bytes
        The file.
    elements : dict of int to (start, value, stop)
        Offsets of an element, of its value, and of what follows; empty if unknown.
    big : bool
        Most significant byte first.
    body : int
        Where a deflated data set begins; 0 if it is not deflated.
    """

    raw: bytes
    elements: dict[int, tuple[int, int, int]] = field(default_factory=dict)
    big: bool = False
    body: int = 0


def sample_of(raw: bytes) -> Sample:
    """Return the sample of a file that has preamble and file meta information."""
    ds = dcmread(io.BytesIO(raw))
    sample = Sample(raw, big=not ds.original_encoding[1])
    if ds.file_meta.TransferSyntaxUID.is_deflated:
        sample.body = 144 + ds.file_meta.FileMetaInformationGroupLength
        return sample
    for tag in ds.keys():  # noqa: SIM118 - iterating over a data set converts its values
        element = ds.get_item(tag)
        value = getattr(element, "value_tell", None)
        length = getattr(element, "length", 0xFFFFFFFF)
        if value is None or length == 0xFFFFFFFF:
            continue
        long = not ds.original_encoding[0] and raw[value - 8 : value - 6] in (b"OB", b"OW", b"SQ")
        sample.elements[int(tag)] = (value - (12 if long else 8), value, value + length)
    return sample


def truncated(rng: Rng, sample: Sample) -> bytes:
    return sample.raw[: int(rng.integers(len(sample.raw)))]


def bits_flipped(rng: Rng, sample: Sample) -> bytes:
    data = bytearray(sample.raw)
    for at in rng.integers(len(data), size=int(rng.integers(1, 9))):
        data[at] ^= 1 << int(rng.integers(8))
    return bytes(data)


def header_bits_flipped(rng: Rng, sample: Sample) -> bytes:
    """Flip bits of what decides most: the first kilobyte after the preamble."""
    data = bytearray(sample.raw)
    stop = min(len(data), 1200)
    for at in rng.integers(128, stop, size=int(rng.integers(1, 4))):
        data[at] ^= 1 << int(rng.integers(8))
    return bytes(data)


def run_replaced(rng: Rng, sample: Sample) -> bytes:
    """Replace a run by zeros, by ones or by noise, as a lost disk block is."""
    start, stop = sorted(int(at) for at in rng.integers(len(sample.raw), size=2))
    fill = (bytes(stop - start), b"\xff" * (stop - start), rng.bytes(stop - start))
    return sample.raw[:start] + fill[int(rng.integers(3))] + sample.raw[stop:]


def run_lost(rng: Rng, sample: Sample) -> bytes:
    start = int(rng.integers(len(sample.raw)))
    return sample.raw[:start] + sample.raw[start + int(rng.integers(1, 200)) :]


def run_doubled(rng: Rng, sample: Sample) -> bytes:
    start = int(rng.integers(len(sample.raw)))
    run = sample.raw[start : start + int(rng.integers(1, 200))]
    return sample.raw[:start] + run + sample.raw[start:]


def grown(rng: Rng, sample: Sample) -> bytes:
    return sample.raw + rng.bytes(int(rng.integers(1, 3000)))


def zeroed(rng: Rng, sample: Sample) -> bytes:
    """Zero bytes: none at all, as many as the file had, or all after some point."""
    kept = int(rng.choice([0, 132, 300, 600]))
    return (b"", sample.raw[:kept] + bytes(len(sample.raw) - kept))[int(rng.integers(8) > 0)]


def tag_dropped(rng: Rng, sample: Sample) -> bytes:
    start, _, stop = _any_element(rng, sample)
    return sample.raw[:start] + sample.raw[stop:]


def tag_moved_last(rng: Rng, sample: Sample) -> bytes:
    start, _, stop = _any_element(rng, sample)
    return sample.raw[:start] + sample.raw[stop:] + sample.raw[start:stop]


def length_changed(rng: Rng, sample: Sample) -> bytes:
    _, value, _ = _any_element(rng, sample)
    data = bytearray(sample.raw)
    width = int(rng.choice([2, 4]))
    data[value - width : value] = rng.choice([rng.bytes(width), b"\xff" * width, bytes(width)])
    return bytes(data)


def number_changed(rng: Rng, sample: Sample) -> bytes:
    """Set size, depth or sign to something odd, huge sizes among them."""
    order = "big" if sample.big else "little"
    data = bytearray(sample.raw)
    for tag in rng.choice(list(NUMBERS), size=int(rng.integers(1, 4)), replace=False):
        if int(tag) in sample.elements:
            _, value, stop = sample.elements[int(tag)]
            odd = int(rng.choice(ODD_NUMBERS))
            data[value:stop] = odd.to_bytes(stop - value, order)  # type: ignore[arg-type]
    return bytes(data)


def text_changed(rng: Rng, sample: Sample) -> bytes:
    """Give a decimal string or code an odd value of its own length."""
    known = [tag for tag in TEXTS if tag in sample.elements]
    if not known:
        return bits_flipped(rng, sample)
    _, value, stop = sample.elements[int(rng.choice(known))]
    text = ODD_TEXTS[int(rng.integers(len(ODD_TEXTS)))]
    return sample.raw[:value] + text[: stop - value].ljust(stop - value) + sample.raw[stop:]


def syntax_changed(rng: Rng, sample: Sample) -> bytes:
    """Declare another transfer syntax than the bytes are in."""
    at = sample.raw.index(b"\x02\x00\x10\x00UI") + 8
    length = int.from_bytes(sample.raw[at - 2 : at], "little")
    ends = (b".1", b".1.99", b".2", b".5", b".4.50", b".4.57", b".4.70", b".4.80", b".4.90", b"")
    name = b"1.2.840.10008.1.2" + ends[int(rng.integers(len(ends)))]
    name += b"\0" * (len(name) % 2)
    head = sample.raw[: at - 2] + len(name).to_bytes(2, "little") + name
    return head + sample.raw[at + length :]


def meta_dropped(rng: Rng, sample: Sample) -> bytes:
    """Leave out the preamble, or some of the file meta information too."""
    return sample.raw[int(rng.choice([128, 132, 132 + int(rng.integers(1, 250))])) :]


def _any_element(rng: Rng, sample: Sample) -> tuple[int, int, int]:
    if not sample.elements:
        start = int(rng.integers(132, len(sample.raw) - 20))
        return start, start + 8, start + 10
    return sample.elements[int(rng.choice(list(sample.elements)))]


Mutator = Callable[[Rng, Sample], bytes]
MUTATORS: tuple[Mutator, ...] = (
    truncated,
    bits_flipped,
    header_bits_flipped,
    run_replaced,
    run_lost,
    run_doubled,
    grown,
    zeroed,
    tag_dropped,
    tag_moved_last,
    length_changed,
    number_changed,
    text_changed,
    syntax_changed,
    meta_dropped,
)


def mutated(rng: Rng, sample: Sample) -> tuple[str, bytes]:
    """Return the name of a random mutator and what it makes of a file; one in five acts twice."""
    chosen = MUTATORS[int(rng.integers(len(MUTATORS)))]
    if sample.body and rng.random() < 0.5:
        return chosen.__name__, _inside(chosen, rng, sample)
    data = chosen(rng, sample)
    if rng.random() < 0.2 and len(data) > 200:
        data = bits_flipped(rng, Sample(data))
    return chosen.__name__, data


def _inside(chosen: Mutator, rng: Rng, sample: Sample) -> bytes:
    """Damage a data set before it is deflated."""
    head, packed = sample.raw[: sample.body], sample.raw[sample.body :]
    plain = zlib.decompress(packed, -zlib.MAX_WBITS)
    if chosen in (syntax_changed, meta_dropped, zeroed):
        return chosen(rng, sample)
    press = zlib.compressobj(wbits=-zlib.MAX_WBITS)
    return head + press.compress(chosen(rng, Sample(plain))) + press.flush()
