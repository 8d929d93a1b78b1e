"""The transfer syntaxes this room reads, and the package that decodes each (PS3.5, annex A)."""

from __future__ import annotations

import importlib.util
from dataclasses import dataclass
from functools import lru_cache
from typing import Final

__all__ = ["IMPLICIT_LITTLE", "SYNTAXES", "Syntax", "installed", "missing_decoder"]

EXPLICIT_LITTLE: Final = "1.2.840.10008.1.2.1"
IMPLICIT_LITTLE: Final = "1.2.840.10008.1.2"
EXPLICIT_BIG: Final = "1.2.840.10008.1.2.2"
DEFLATED: Final = "1.2.840.10008.1.2.1.99"
RLE: Final = "1.2.840.10008.1.2.5"
JPEG_LS_NEAR: Final = "1.2.840.10008.1.2.4.81"
JPEG_2000: Final = "1.2.840.10008.1.2.4.91"


@dataclass(frozen=True, slots=True)
class Syntax:
    """One transfer syntax.

    Attributes
    ----------
    name : str
        What people call it.
    family : {"native", "rle", "jpeg", "jpeg-ls", "jpeg-2000"}
        Which kind of pixel stream it holds.
    lossy : {"no", "yes", "possible"}
        Whether decoded values differ from the stored ones.
    modules : tuple of str
        Importable modules of which one is needed to decode it.
    package : str
        The distribution that brings such a module.
    """

    name: str
    family: str
    lossy: str = "no"
    modules: tuple[str, ...] = ()
    package: str = ""

    @property
    def encapsulated(self) -> bool:
        """True if frames are wrapped one by one instead of lying end to end."""
        return self.family != "native"

    @property
    def pip_command(self) -> str:
        """What to type to get the decoder; empty if none is needed."""
        return f"pip install {self.package}" if self.package else ""


def _jpeg(name: str, lossy: str = "no") -> Syntax:
    return Syntax(name, "jpeg", lossy, ("libjpeg",), "pylibjpeg pylibjpeg-libjpeg")


def _jpeg_ls(name: str, lossy: str = "no") -> Syntax:
    return Syntax(name, "jpeg-ls", lossy, ("jpeg_ls", "libjpeg"), "pyjpegls")


def _jpeg_2000(name: str, lossy: str = "no") -> Syntax:
    return Syntax(name, "jpeg-2000", lossy, ("openjpeg",), "pylibjpeg pylibjpeg-openjpeg")


#: transfer syntax UID -> what it is (PS3.6, table A-1)
SYNTAXES: Final[dict[str, Syntax]] = {
    IMPLICIT_LITTLE: Syntax("Implicit little endian", "native"),
    EXPLICIT_LITTLE: Syntax("Explicit little endian", "native"),
    EXPLICIT_BIG: Syntax("Explicit big endian", "native"),
    DEFLATED: Syntax("Deflated explicit little endian", "native"),
    RLE: Syntax("RLE lossless", "rle"),
    "1.2.840.10008.1.2.4.50": _jpeg("JPEG baseline 8 bit", "yes"),
    "1.2.840.10008.1.2.4.51": _jpeg("JPEG extended 12 bit", "yes"),
    "1.2.840.10008.1.2.4.57": _jpeg("JPEG lossless"),
    "1.2.840.10008.1.2.4.70": _jpeg("JPEG lossless, first-order prediction"),
    "1.2.840.10008.1.2.4.80": _jpeg_ls("JPEG-LS lossless"),
    JPEG_LS_NEAR: _jpeg_ls("JPEG-LS near-lossless", "possible"),
    "1.2.840.10008.1.2.4.90": _jpeg_2000("JPEG 2000 lossless"),
    JPEG_2000: _jpeg_2000("JPEG 2000", "possible"),
}


@lru_cache(maxsize=64)
def _importable(module: str) -> bool:
    return importlib.util.find_spec(module) is not None


def installed(syntax: Syntax) -> str:
    """Return the first importable module that decodes a syntax, ``""`` if there is none."""
    return next((module for module in syntax.modules if _importable(module)), "")


def missing_decoder(syntax: Syntax) -> str:
    """Return the pip command that brings the missing decoder, ``""`` if none is missing.

    Examples
    --------
    >>> missing_decoder(SYNTAXES[IMPLICIT_LITTLE])
    ''
    """
    return syntax.pip_command if syntax.modules and not installed(syntax) else ""
