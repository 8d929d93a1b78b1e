"""What may be kept of a file's text: cleaned, short, and never as an identifier."""

from __future__ import annotations

import hashlib
from functools import lru_cache

__all__ = ["codec_of", "digest_of", "known_position", "known_unit", "shown_text"]

#: PS3.3, C.7.3.1.1.2: head, feet, left, right, front or back first; supine, prone, on a side
_POSITIONS = frozenset(
    [
        "HFP",
        "HFS",
        "HFDR",
        "HFDL",
        "FFDR",
        "FFDL",
        "FFP",
        "FFS",
        "LFP",
        "LFS",
        "RFP",
        "RFS",
        "AFDR",
        "AFDL",
        "PFDR",
        "PFDL",
    ]
)
#: PS3.3, C.11.1.1.2
_UNITS = frozenset(["OD", "HU", "US", "MGML", "Z_EFF", "ED", "EDW", "HU_MOD", "PCT"])
#: single-byte and UTF-8 character sets of PS3.3, C.12.1.1.2; others are shown as far as ASCII goes
_CODECS = {
    "": "ascii",
    "ISO_IR 6": "ascii",
    "ISO_IR 13": "shift_jis",
    "ISO_IR 100": "latin-1",
    "ISO_IR 101": "iso8859-2",
    "ISO_IR 109": "iso8859-3",
    "ISO_IR 110": "iso8859-4",
    "ISO_IR 126": "iso8859-7",
    "ISO_IR 127": "iso8859-6",
    "ISO_IR 138": "iso8859-8",
    "ISO_IR 144": "iso8859-5",
    "ISO_IR 148": "iso8859-9",
    "ISO_IR 166": "tis-620",
    "ISO_IR 192": "utf-8",
    "GB18030": "gb18030",
    "GBK": "gbk",
}


@lru_cache(maxsize=4096)
def digest_of(uid: str) -> str:
    """Return the SHA-256 of a UID, hexadecimal: the same series is known again, unnamed.

    Examples
    --------
    >>> digest_of("1.2.3")[:12]
    'c47f5b18b8a4'
    """
    return hashlib.sha256(uid.encode("utf-8", "replace")).hexdigest()


def codec_of(name: str) -> str:
    """Return the codec of a character set's name, that of ASCII if it is not known.

    Examples
    --------
    >>> codec_of("ISO_IR 192"), codec_of("ISO 2022 IR 100"), codec_of("EBCDIC")
    ('utf-8', 'latin-1', 'ascii')
    """
    return _CODECS.get(name.replace("ISO 2022 IR", "ISO_IR"), "ascii")


@lru_cache(maxsize=4096)
def shown_text(raw: bytes, charset: str, *, longest: int = 64) -> str:
    r"""Return free text fit for a screen: one line, printable, at most `longest` characters.

    Examples
    --------
    >>> shown_text(b"Water\x00\n phantom ", "")
    'Water phantom'
    """
    text = raw.decode(codec_of(charset.split("\\", maxsplit=1)[0]), "replace")
    kept = "".join(c if c.isprintable() and c != "\ufffd" else " " for c in text)
    return " ".join(kept.split())[:longest]


@lru_cache(maxsize=256)
def known_position(text: str) -> str:
    """Return a patient position if it is one of the standard's, else ``""``.

    Examples
    --------
    >>> known_position("HFS"), known_position("SMITH")
    ('HFS', '')
    """
    return text if text in _POSITIONS else ""


@lru_cache(maxsize=256)
def known_unit(text: str) -> str:
    """Return a rescale type if it is one of the standard's, else ``""``.

    Examples
    --------
    >>> known_unit("MGML"), known_unit("SMITH")
    ('MGML', '')
    """
    return text if text in _UNITS else ""
