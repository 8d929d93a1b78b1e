"""Files that people write, in YAML or JSON: read with care, and every fault told with its place."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import yaml
from pydantic import BaseModel, ValidationError

from ct_measure_plugin.errors import MaterialsError

if TYPE_CHECKING:
    from collections.abc import Mapping

__all__ = ["checked", "place_of", "read_written"]

#: A larger file was not written by a person.
LARGEST_FILE = 4 * 2**20

_Model = TypeVar("_Model", bound=BaseModel)


def read_written(path: str | Path) -> Any:
    """Return what a YAML or JSON file holds.

    Raises
    ------
    MaterialsError
        If it cannot be read, is too large, or is neither; the message names the file and line.
    """
    file = Path(path).expanduser()
    try:
        if file.stat().st_size > LARGEST_FILE:
            raise MaterialsError({file.name: "is too large to have been written by hand"})
        text = file.read_text(encoding="utf-8")
        return json.loads(text) if file.suffix.lower() == ".json" else yaml.safe_load(text)
    except OSError as error:
        raise MaterialsError({file.name: f"cannot be read ({error.strerror})"}) from None
    except (ValueError, yaml.YAMLError, RecursionError) as error:
        if isinstance(error, MaterialsError):
            raise
        mark = getattr(error, "problem_mark", None)
        line = f" at line {mark.line + 1}" if mark else ""
        raise MaterialsError({file.name: f"is not valid YAML or JSON{line}"}) from None


def checked(kind: type[_Model], given: Any, at: str) -> tuple[_Model | None, Mapping[str, str]]:
    """Return a model, or None and its faults by their place under `at`."""
    try:
        return kind.model_validate(given), {}
    except ValidationError as error:
        return None, {
            place_of(at, e["loc"]): e["msg"].removeprefix("Value error, ") for e in error.errors()
        }


def place_of(at: str, parts: tuple[int | str, ...]) -> str:
    """Return a place in words: ``materials[2].density_g_cm3``.

    >>> place_of("materials", (2, "density_g_cm3"))
    'materials[2].density_g_cm3'
    """
    return at + "".join(f"[{part}]" if isinstance(part, int) else f".{part}" for part in parts)
