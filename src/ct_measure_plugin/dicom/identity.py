"""Whose images they are: read when a DICOM object is written for them, and for nothing else.

PS3.3 has every object of a study repeat its patient and study. This file alone reads those
elements, and what it reads goes from here into the written object: nothing else ever holds it.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Final

from ct_measure_plugin.dicom import tags
from ct_measure_plugin.dicom.header import UnreadableFileError, read_header
from ct_measure_plugin.dicom.texts import codec_of
from ct_measure_plugin.errors import SeriesError

if TYPE_CHECKING:
    import os

    from pydicom.dataset import Dataset

    from ct_measure_plugin.dicom.elements import Elements

__all__ = ["StudyFacts", "give_identity", "study_facts"]

STUDY_UID: Final = 0x0020000D
FRAME_UID: Final = 0x00200052
POSITION_REFERENCE: Final = 0x00201040
#: type 1 and 2 attributes of the Patient and General Study modules (PS3.3, C.7.1.1 and C.7.2.1)
#: with the few that tell equal numbers apart; tag -> value representation
IDENTITY: Final[dict[int, str]] = {
    0x00080020: "DA",  # study date
    0x00080030: "TM",  # study time
    0x00080050: "SH",  # accession number
    0x00080090: "PN",  # referring physician
    0x00081030: "LO",  # study description
    0x00100010: "PN",  # patient's name
    0x00100020: "LO",  # patient ID
    0x00100021: "LO",  # issuer of patient ID
    0x00100030: "DA",  # birth date
    0x00100040: "CS",  # sex
    0x00120062: "CS",  # patient identity removed
    0x00120063: "LO",  # de-identification method
    0x00200010: "SH",  # study ID
}
_REFERENCES: Final = frozenset(
    {tags.CHARACTER_SET, tags.SOP_CLASS, tags.MODALITY, STUDY_UID, FRAME_UID, POSITION_REFERENCE}
)


@dataclass(frozen=True, slots=True)
class StudyFacts:
    """What a written object must repeat of its sources; stays inside the room.

    Attributes
    ----------
    sop_class, study_uid, frame_uid : str
        Which kind of object the sources are, their study and their frame of reference.
    identity : tuple of (int, str, str)
        Tag, value representation and text of the patient and study; empty if anonymous.
    """

    sop_class: str
    study_uid: str = field(repr=False)
    frame_uid: str = field(repr=False)
    identity: tuple[tuple[int, str, str], ...] = field(repr=False, default=())


def study_facts(path: str | os.PathLike[str], *, anonymous: bool) -> StudyFacts:
    """Read patient and study from a source file; if anonymous, the study's UIDs alone.

    Raises
    ------
    SeriesError
        If the file cannot be read any more, or lacks the UIDs that an object must repeat.
    """
    wanted = _REFERENCES if anonymous else _REFERENCES | frozenset(IDENTITY)
    try:
        elements = read_header(path, wanted).elements
    except UnreadableFileError as problem:
        raise SeriesError(f"a source image cannot be read: {problem.reason}") from None
    except OSError:
        raise SeriesError("a source image cannot be opened") from None
    facts = StudyFacts(
        sop_class=elements.text(tags.SOP_CLASS),
        study_uid=elements.text(STUDY_UID),
        frame_uid=elements.text(FRAME_UID),
        identity=() if anonymous else _identity_in(elements),
    )
    if not facts.study_uid or not facts.sop_class:
        raise SeriesError("the source images lack the UIDs that a DICOM object must refer to")
    if not facts.frame_uid:
        raise SeriesError("the source images lack a frame of reference, so nothing has a place")
    return facts


def _identity_in(elements: Elements) -> tuple[tuple[int, str, str], ...]:
    charset = elements.text(tags.CHARACTER_SET)
    return tuple(
        (tag, vr, _decoded(elements.raw(tag), charset))
        for tag, vr in IDENTITY.items()
        if tag in elements
    )


def _decoded(raw: bytes, charset: str) -> str:
    raw = raw.strip(b" \0")
    names = [name.strip() for name in charset.split("\\")]
    if b"\x1b" in raw:
        return _switching(raw, names)
    return raw.decode(codec_of(names[0]), "replace")


def _switching(raw: bytes, names: list[str]) -> str:
    """Decode text that changes its character set on the way (PS3.5, 6.1.2.5)."""
    from pydicom.charset import decode_bytes, python_encoding

    from ct_measure_plugin.dicom.quiet import unwarned

    known = [python_encoding[name] for name in names if name in python_encoding]
    with unwarned():
        return decode_bytes(raw, known or ["ascii"], {ord(c) for c in "\\^="})


def give_identity(ds: Dataset, facts: StudyFacts) -> None:
    """Write patient and study into an object, word for word and unjudged.

    Odd values are copied like others; to complain of them would mean to quote them.
    """
    from pydicom import config
    from pydicom.dataelem import DataElement

    for tag, vr, text in facts.identity:
        value: Any = text
        ds[tag] = DataElement(tag, vr, value, validation_mode=config.IGNORE)
