"""Window presets: those that come along, and people's own, kept between sessions.

The presets for anatomy and for image-quality work are common practice, not a standard: starting
points, chosen from the ranges that textbooks and departments use. Saving an own preset under the
name of one of them replaces it; removing the own one brings it back.
"""

from __future__ import annotations

import json
import os
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import Any

from platformdirs import user_config_path

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.windowing import WindowFunction, check_window

__all__ = ["ANATOMY", "GROUPS", "OWN", "QUALITY", "Preset", "PresetShelf", "presets_file"]

ANATOMY, QUALITY, OWN = "Anatomy", "Image quality", "Own"
GROUPS = (OWN, QUALITY, ANATOMY)

_LONGEST_NAME = 60


@dataclass(frozen=True, slots=True)
class Preset:
    """A named window.

    Attributes
    ----------
    name : str
        Unique over all presets.
    centre, width : float
        HU.
    group : str
        One of :data:`GROUPS`.
    function : {"LINEAR", "LINEAR_EXACT", "SIGMOID"}
        How centre and width are meant.
    note : str
        What it is for.
    """

    name: str
    centre: float
    width: float
    group: str = OWN
    function: WindowFunction = "LINEAR"
    note: str = ""

    def __post_init__(self) -> None:
        if not self.name.strip() or len(self.name) > _LONGEST_NAME:
            raise ArgumentError("name", f"must have 1 to {_LONGEST_NAME} characters", self.name)
        check_window(self.centre, self.width, self.function)


def _anatomy(name: str, width: float, centre: float, note: str = "") -> Preset:
    return Preset(name, centre, width, ANATOMY, note=note)


def _quality(name: str, width: float, centre: float, note: str) -> Preset:
    return Preset(name, centre, width, QUALITY, note=note)


#: Common practice, not a standard.
BUILT_IN: tuple[Preset, ...] = (
    _anatomy("Brain", 80, 40),
    _anatomy("Brain, narrow", 40, 40, "Grey against white matter."),
    _anatomy("Blood by bone", 200, 75, "Thin bleedings along the skull."),
    _anatomy("Temporal bone", 2800, 600),
    _anatomy("Soft tissue", 400, 50),
    _anatomy("Abdomen", 350, 50),
    _anatomy("Liver", 150, 30, "With contrast agent, centre 50 to 100."),
    _anatomy("Mediastinum", 350, 50),
    _anatomy("Lung", 1500, -600),
    _anatomy("Bone", 2000, 500),
    _anatomy("Spine", 250, 50),
    _anatomy("Vessels", 600, 300, "Vessels filled with contrast agent."),
    _quality("Water", 100, 0, "Cupping, shading and rings in water."),
    _quality("Low contrast", 60, 40, "Set the centre to the background's mean: 'From a region'."),
    _quality("Rings", 50, 0, "Set the centre to the background's mean: 'From a region'."),
    _quality("Rods", 400, 0, "Alignment, and inserts near water."),
    _quality("Dense inserts", 1000, 1100, "Bar patterns and other high-contrast detail."),
    _quality("Wire and beads", 3000, 800, "Small dense objects, without clipping their peak."),
    _quality("Outline in air", 1000, -500, "The edge against air."),
    _quality("Full scale", 4096, 1024, "Everything from -1024 to 3071 HU, as 12 bits hold it."),
)


def presets_file() -> Path:
    """Return the file that holds people's own presets."""
    return user_config_path("ct-measure-plugin", appauthor=False) / "window_presets.json"


class PresetShelf:
    """All presets: those that come along, with people's own over them.

    Parameters
    ----------
    file : Path, optional
        Where the own ones are kept.

    Attributes
    ----------
    problem : str
        What was wrong with the file, in a sentence for the user; "" if nothing was. A file that
        cannot be read is put aside, not overwritten.
    """

    def __init__(self, file: Path | None = None) -> None:
        self._file = presets_file() if file is None else file
        self.problem = ""
        self._own: dict[str, Preset] = {}
        self._load()

    def all(self) -> tuple[Preset, ...]:
        """Return every preset, by group, in the order of menus; own ones replace their namesakes.

        A replaced preset keeps its place.
        """
        base = tuple(self._own.get(one.name, one) for one in BUILT_IN)
        names = {one.name for one in BUILT_IN}
        return (*base, *(one for name, one in self._own.items() if name not in names))

    def is_own(self, name: str) -> bool:
        """Tell whether a preset was saved by the user and can be removed."""
        return name in self._own

    def save(self, preset: Preset) -> None:
        """Keep a preset, over one of the same name.

        Raises
        ------
        OSError
            If the file cannot be written.
        """
        place = next((one.group for one in BUILT_IN if one.name == preset.name), OWN)
        self._own[preset.name] = replace(preset, group=place)
        self._write()

    def remove(self, name: str) -> None:
        """Forget an own preset; one that came along under this name is back."""
        if self._own.pop(name, None) is not None:
            self._write()

    def _load(self) -> None:
        try:
            entries = json.loads(self._file.read_text(encoding="utf-8"))["presets"]
            if not isinstance(entries, list):
                raise TypeError
        except FileNotFoundError:
            return
        except (OSError, ValueError, KeyError, TypeError, RecursionError):
            self._put_aside()
            return
        for entry in entries:
            preset = _preset_of(entry)
            if preset is None:
                self.problem = "Some of your own window presets could not be read."
            else:
                self._own[preset.name] = preset

    def _put_aside(self) -> None:
        aside = self._file.with_suffix(".unreadable.json")
        self.problem = "Your own window presets could not be read."
        try:
            os.replace(self._file, aside)
        except OSError:
            return
        self.problem += f" The file was put aside as {aside.name}."

    def _write(self) -> None:
        self._file.parent.mkdir(parents=True, exist_ok=True)
        text = json.dumps({"presets": [asdict(one) for one in self._own.values()]}, indent=1)
        part = self._file.with_suffix(".part")
        part.write_text(text, encoding="utf-8")
        os.replace(part, self._file)


def _preset_of(entry: Any) -> Preset | None:
    """Return the preset that an entry of the file describes, None if it describes none."""
    try:
        group = entry.get("group", OWN)
        return Preset(
            name=str(entry["name"]),
            centre=float(entry["centre"]),
            width=float(entry["width"]),
            group=group if group in GROUPS else OWN,
            function=entry.get("function", "LINEAR"),
            note=str(entry.get("note", "")),
        )
    except (AttributeError, KeyError, TypeError, ValueError, OverflowError):
        return None
