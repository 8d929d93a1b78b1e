"""Regions as a file of their own: geometry in mm, names, classes and codes, and their frame.

The form is laid out like a GeoJSON FeatureCollection, with shapes in mm in place of a globe's;
``docs/region_file.md`` describes it, and ``docs/region_file.schema.json`` is its JSON Schema.
"""

from __future__ import annotations

import json
import math
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.errors import ArgumentError, RegionError, RegionFileError
from ct_measure_plugin.records.region_text import region_from_dict, region_to_dict

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["Frame", "RegionFile", "read_regions", "regions_from_text", "write_regions"]

FORMAT = "ct-measure-plugin regions"
VERSION = 1

#: A larger file is not read.
LARGEST_FILE = 512 * 2**20

#: Angle between two sets of axes from which they are two frames, degrees.
TURNED = 0.1

#: What stands in a feature's properties rather than in its geometry: ours and the file's word.
_PROPERTIES = {"name": "name", "group": "class", "code": "code", "values": "values"}


@dataclass(frozen=True, slots=True)
class Frame:
    """What the millimetres of regions refer to.

    Attributes
    ----------
    kind : {"patient", "array"}
        "patient": the DICOM patient frame seen along the image's axes; "array": mm from the centre
        of voxel (0, 0, 0), which only a volume with the same voxels shares.
    direction_lps : tuple of three (x, y, z)
        Unit vectors of the image frame's z, y and x in LPS; empty for an array.
    series_digest : str
        The series on which the regions were drawn; a reader may tell that another is measured.
    """

    kind: str = "array"
    direction_lps: tuple[tuple[float, float, float], ...] = ()
    series_digest: str = ""

    @classmethod
    def of(cls, volume: Volume) -> Frame:
        """Return a volume's frame."""
        if volume.direction_lps is None:
            return cls(series_digest=volume.source.series_digest)
        rows = np.asarray(volume.direction_lps, float).tolist()
        axes = tuple((float(x), float(y), float(z)) for x, y, z in rows)
        return cls("patient", axes, volume.source.series_digest)

    def problem(self, volume: Volume) -> str:
        """Return why regions in this frame do not lie on a volume as drawn; "" if they do.

        >>> import numpy as np, ct_measure_plugin as ctm
        >>> Frame().problem(ctm.Volume(np.zeros((3, 4, 4)), (1.0, 1.0, 1.0)))
        ''
        """
        other = Frame.of(volume)
        if self.kind != other.kind:
            return f"the regions lie in the frame of {_words(self)}, the volume in {_words(other)}"
        if self.kind == "array":
            return ""
        cosines = np.sum(np.asarray(self.direction_lps) * np.asarray(other.direction_lps), axis=1)
        angle = math.degrees(math.acos(float(np.clip(cosines.min(), -1.0, 1.0))))
        if angle <= TURNED:
            return ""
        return f"the regions were drawn on slices that lie {angle:.1f}° away from the volume's"


def _words(frame: Frame) -> str:
    return "a patient" if frame.kind == "patient" else "a plain array"


@dataclass(frozen=True, slots=True, eq=False)
class RegionFile:
    """What a region file holds.

    Attributes
    ----------
    regions : tuple of Region
        In the file's order.
    frame : Frame
        What their millimetres refer to.
    title : str
        What people call the set.
    """

    regions: tuple[Region, ...]
    frame: Frame
    title: str = ""


def write_regions(
    regions: Sequence[Region],
    path: str | Path,
    *,
    volume: Volume | None = None,
    title: str = "",
) -> Path:
    """Write regions to a file.

    Parameters
    ----------
    regions : sequence of Region
        Any kinds; a mask is packed.
    path : path
        Usually ``*.regions.json``.
    volume : Volume, optional
        The volume on which they were drawn, whose frame is written; without it the frame is that
        of a plain array.
    title : str
        What people call the set; nothing that identifies a person belongs here.

    Examples
    --------
    >>> import tempfile
    >>> from ct_measure_plugin.physics.regions import Disc
    >>> place = Path(tempfile.mkdtemp()) / "rods.regions.json"
    >>> rod = Disc((10.0, 20.0), 6.0, z_mm=40.0, name="rod 1", group="PTFE", code="99LAB:PTFE")
    >>> read_regions(write_regions([rod], place)).regions == (rod,)
    True
    """
    frame = Frame() if volume is None else Frame.of(volume)
    data = {
        "type": "FeatureCollection",
        "format": FORMAT,
        "version": VERSION,
        "title": title,
        "frame": _frame_to_dict(frame),
        "features": [_feature(region) for region in regions],
    }
    file = Path(path)
    text = json.dumps(data, indent=1, ensure_ascii=False, allow_nan=False)
    file.write_text(text + "\n", encoding="utf-8")
    return file


def read_regions(path: str | Path) -> RegionFile:
    """Read a region file.

    Raises
    ------
    RegionFileError
        If the file cannot be read or is none; every fault at once, each with its place.
    """
    file = Path(path)
    try:
        if file.stat().st_size > LARGEST_FILE:
            raise RegionFileError({file.name: "is too large for a region file"})
        text = file.read_text(encoding="utf-8")
    except OSError as error:
        raise RegionFileError({file.name: f"cannot be read ({error.strerror})"}) from None
    except UnicodeDecodeError:
        raise RegionFileError({file.name: "is not UTF-8 text"}) from None
    return regions_from_text(text, name=file.name)


def regions_from_text(text: str, *, name: str = "text") -> RegionFile:
    """Return what a region file's text says; raises as :func:`read_regions` does."""
    try:
        data = json.loads(text)
    except (ValueError, RecursionError):
        raise RegionFileError({name: "is not valid JSON"}) from None
    if not isinstance(data, dict) or data.get("format") != FORMAT:
        raise RegionFileError({name: f"does not say that its format is '{FORMAT}'"})
    if data.get("version") != VERSION:
        raise RegionFileError({"version": f"must be {VERSION}, got {data.get('version')!r}"})
    problems: dict[str, str] = {}
    frame = Frame()
    try:
        frame = _frame_from_dict(data.get("frame"))
    except ArgumentError as error:
        problems["frame"] = str(error)
    features = data.get("features")
    regions = []
    if not isinstance(features, list):
        problems["features"] = "must be a list"
        features = []
    for i, feature in enumerate(features):
        try:
            regions.append(_region(feature))
        except RegionError as error:
            problems[f"features[{i}]"] = str(error)
    title = data.get("title", "")
    if not isinstance(title, str):
        problems["title"] = "must be text"
    if problems:
        raise RegionFileError(problems)
    return RegionFile(tuple(regions), frame, title)


def _feature(region: Region) -> dict[str, Any]:
    found = region_to_dict(region)
    properties = {word: found.pop(ours) for ours, word in _PROPERTIES.items() if ours in found}
    geometry = {"type": found.pop("kind"), **found}
    return {"type": "Feature", "properties": properties, "geometry": geometry}


def _region(feature: Any) -> Region:
    if not isinstance(feature, dict) or feature.get("type") != "Feature":
        raise RegionError("feature", "must be of type Feature", type(feature).__name__)
    geometry, properties = feature.get("geometry"), feature.get("properties", {})
    if not isinstance(geometry, dict):
        raise RegionError("geometry", "must be a set of named values", geometry)
    if not isinstance(properties, dict):
        raise RegionError("properties", "must be a set of named values", properties)
    if unknown := [key for key in geometry if key in ("kind", *_PROPERTIES)]:
        raise RegionError(unknown[0], "does not belong in a geometry", geometry[unknown[0]])
    found = {key: value for key, value in geometry.items() if key != "type"}
    found["kind"] = geometry.get("type")
    # properties that we do not know are other people's, and are left alone
    found.update(
        {ours: properties[word] for ours, word in _PROPERTIES.items() if word in properties}
    )
    return region_from_dict(found)


def _frame_to_dict(frame: Frame) -> dict[str, Any]:
    found: dict[str, Any] = {
        "kind": frame.kind,
        "unit": "mm",
        "points": "y, x",
        "angles": "degrees, counter-clockwise on the screen from +x, with +y pointing down",
    }
    if frame.direction_lps:
        found["direction_lps"] = [list(axis) for axis in frame.direction_lps]
    if frame.series_digest:
        found["series_digest"] = frame.series_digest
    return found


def _frame_from_dict(given: Any) -> Frame:
    if not isinstance(given, dict):
        raise ArgumentError("frame", "must be a set of named values", given)
    if given.get("unit") != "mm":
        raise ArgumentError("unit", "must be 'mm'", given.get("unit"))
    kind, digest = given.get("kind"), given.get("series_digest", "")
    if kind not in ("patient", "array"):
        raise ArgumentError("kind", "must be 'patient' or 'array'", kind)
    if not isinstance(digest, str):
        raise ArgumentError("series_digest", "must be text", digest)
    if kind == "array":
        return Frame(series_digest=digest)
    rule = "must be three unit vectors at right angles"
    try:
        axes = np.asarray(given.get("direction_lps"), dtype=float)
    except (TypeError, ValueError):
        raise ArgumentError("direction_lps", rule, given.get("direction_lps")) from None
    if axes.shape != (3, 3) or not bool(np.allclose(axes @ axes.T, np.eye(3), atol=1e-3)):
        raise ArgumentError("direction_lps", rule, given.get("direction_lps"))
    rows = tuple((float(x), float(y), float(z)) for x, y, z in axes.tolist())
    return Frame("patient", rows, digest)
