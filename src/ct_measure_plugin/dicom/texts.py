"""What may be kept of a file's text: cleaned, short, and never as an identifier."""

from __future__ import annotations

import hashlib
import re
from functools import lru_cache

__all__ = ["digest_of", "plain_word", "shown_text"]

_WORD = re.compile(r"[A-Z0-9_]{1,16}")
#: single-byte and UTF-8 character sets of PS3.3, C.12.1.1.2; others are shown as far as ASCII goes
_CODECS = {
    "": "ascii",
    "ISO_IR 6": "ascii",
    "ISO_IR 100": "latin-1",
    "ISO_IR 101": "iso8859-2",
    "ISO_IR 109": "iso8859-3",
    "ISO_IR 110": "iso8859-4",
    "ISO_IR 126": "iso8859-7",
    "ISO_IR 127": "iso8859-6",
    "ISO_IR 138": "iso8859-8",
    "ISO_IR 144": "iso8859-5",
    "ISO_IR 148": "iso8859-9",
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


@lru_cache(maxsize=4096)
def shown_text(raw: bytes, charset: str, *, longest: int = 64) -> str:
    r"""Return free text fit for a screen: one line, printable, at most `longest` characters.

    Examples
    --------
    >>> shown_text(b"Water\x00\n phantom ", "")
    'Water phantom'
    """
    codec = _CODECS.get(charset.split("\\", maxsplit=1)[0], "ascii")
    text = raw.decode(codec, "replace")
    kept = "".join(c if c.isprintable() and c != "\ufffd" else " " for c in text)
    return " ".join(kept.split())[:longest]


@lru_cache(maxsize=256)
def plain_word(text: str) -> str:
    """Return a code word of the standard's shape (capitals, digits), or ``""``.

    Examples
    --------
    >>> plain_word("HFS"), plain_word("see notes")
    ('HFS', '')
    """
    return text if _WORD.fullmatch(text) else ""
