"""Reads the content tree of a structured report by its tags alone: a second reader for tests."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from pydicom import Dataset, dcmread


@dataclass
class Node:
    """One content item: its concept, its value, and what it contains."""

    relation: str
    kind: str
    name: str
    value: Any
    children: list[Node] = field(default_factory=list)

    def all(self, name: str) -> list[Node]:
        """Return the direct children of a concept."""
        return [child for child in self.children if child.name == name]

    def one(self, name: str) -> Node:
        (child,) = self.all(name)
        return child


def coded(item: Dataset) -> str:
    value = item.get("CodeValue") or item.get("LongCodeValue")
    return f"{item.CodingSchemeDesignator}:{value}"


def _value(item: Dataset) -> Any:
    kind = item.ValueType
    if kind == "CODE":
        code = item.ConceptCodeSequence[0]
        return coded(code), str(code.CodeMeaning)
    if kind == "NUM":
        measured = item.MeasuredValueSequence[0]
        value = float(measured.get("FloatingPointValue", measured.NumericValue))
        return value, coded(measured.MeasurementUnitsCodeSequence[0])
    if kind in ("TEXT", "UIDREF", "PNAME"):
        return str(item.get({"TEXT": "TextValue", "UIDREF": "UID", "PNAME": "PersonName"}[kind]))
    if kind == "SCOORD":
        return str(item.GraphicType), list(item.GraphicData)
    if kind == "IMAGE":
        reference = item.ReferencedSOPSequence[0]
        frame, segment = (
            reference.get("ReferencedFrameNumber"),
            reference.get("ReferencedSegmentNumber"),
        )
        return str(reference.ReferencedSOPInstanceUID), frame, segment
    assert kind == "CONTAINER", kind
    return None


def node_of(item: Dataset) -> Node:
    concept = item.get("ConceptNameCodeSequence")
    return Node(
        str(item.get("RelationshipType", "")),
        str(item.ValueType),
        coded(concept[0]) if concept else "",
        _value(item),
        [node_of(child) for child in item.get("ContentSequence", [])],
    )


def tree_of(file: Path) -> Node:
    """Return the content tree of a report."""
    return node_of(dcmread(file))


def groups_of(file: Path) -> list[Node]:
    """Return the measurement groups of a TID 1500 report (126010 holds them, 125007 is each)."""
    return tree_of(file).one("DCM:126010").all("DCM:125007")
