"""Coded names: what DICOM puts beside words so that machines know what is meant (PS3.3, 8.8)."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    from pydicom.dataset import Dataset

__all__ = ["OWN_SCHEME", "REGION", "Code", "LabelClass", "code_in", "is_text", "own_code"]

#: designator of the codes that no standard has; PS3.16, 8.2: private ones begin with 99
OWN_SCHEME: Final = "99CTMEASURE"
_SHORT: Final = 16
_LONG: Final = 64


def is_text(text: str, longest: int = _LONG) -> bool:
    r"""Tell whether DICOM can hold a text in one short value (PS3.5, 6.2).

    Examples
    --------
    >>> is_text("Köln"), is_text("a\\b"), is_text("")
    (True, False, False)
    """
    return 0 < len(text.strip()) <= len(text) <= longest and text.isprintable() and "\\" not in text


@dataclass(frozen=True, slots=True)
class Code:
    """A coded concept.

    Parameters
    ----------
    value : str
        The code, at most 64 characters.
    scheme : str
        Who defined it: "SCT" (SNOMED CT), "DCM" (DICOM), "RADLEX", …; at most 16 characters.
    meaning : str
        In words, at most 64 characters.

    Examples
    --------
    >>> Code.of("SCT:10200004", "Liver")
    Code(value='10200004', scheme='SCT', meaning='Liver')
    """

    value: str
    scheme: str
    meaning: str

    def __post_init__(self) -> None:
        for name, longest in (("value", _LONG), ("scheme", _SHORT), ("meaning", _LONG)):
            if not is_text(getattr(self, name), longest):
                rule = f"must be 1 to {longest} printable characters without a backslash"
                raise ArgumentError(name, rule, getattr(self, name))

    @classmethod
    def of(cls, text: str, meaning: str) -> Code:
        """Return the code that "scheme:value" writes.

        Raises
        ------
        ArgumentError
            If the text is not of that form.
        """
        scheme, _, value = text.partition(":")
        if not scheme.strip() or not value.strip():
            raise ArgumentError("code", "must be scheme:value", text)
        return cls(value.strip(), scheme.strip(), meaning)

    @property
    def text(self) -> str:
        """The code as "scheme:value"."""
        return f"{self.scheme}:{self.value}"

    def concept(self) -> Any:
        """Return the code as the DICOM library has it."""
        from highdicom.sr import CodedConcept

        return CodedConcept(self.value, self.scheme, self.meaning)


#: a region of whatever kind, where nobody said what it shows: a place, and no more than that
REGION: Final = Code("309825002", "SCT", "Spatial and Relational Concept")


@dataclass(frozen=True, slots=True)
class LabelClass:
    """What a label stands for.

    Parameters
    ----------
    name : str
        What people call it, at most 64 characters.
    kind : Code, optional
        What it is; by default a code of this package that carries the name.
    category : Code, optional
        What sort of thing that is: anatomical structure, physical object, … (PS3.16, CID 7150); by
        default a spatial concept, which claims nothing.

    Examples
    --------
    >>> LabelClass("water insert").kind_or_own
    Code(value='region', scheme='99CTMEASURE', meaning='water insert')
    """

    name: str
    kind: Code | None = None
    category: Code | None = None

    def __post_init__(self) -> None:
        if not is_text(self.name):
            rule = f"must be 1 to {_LONG} printable characters without a backslash"
            raise ArgumentError("name", rule, self.name)

    @property
    def kind_or_own(self) -> Code:
        """The kind, or this package's code for a region of that name."""
        return self.kind or own_code("region", self.name)

    @property
    def category_or_own(self) -> Code:
        """The category, or that of a place."""
        return self.category or REGION


def own_code(value: str, meaning: str) -> Code:
    """Return a code of this package's own scheme; its meaning is cut to what DICOM can hold."""
    plain = "".join(c if c.isprintable() and c != "\\" else " " for c in meaning)
    return Code(value, OWN_SCHEME, plain[:_LONG].strip())


def code_in(item: Dataset | None) -> Code | None:
    """Return the code that an item of a code sequence holds, None if it holds none."""
    if item is None:
        return None
    value = next(
        (str(item[name].value) for name in _VALUES if name in item and item[name].value), ""
    )
    scheme, meaning = str(item.get("CodingSchemeDesignator", "")), str(item.get("CodeMeaning", ""))
    try:
        return Code(value.strip(), scheme.strip(), meaning.strip()[:_LONG])
    except ArgumentError:
        return None


_VALUES: Final = ("CodeValue", "LongCodeValue", "URNCodeValue")
