"""Materials by name: the list that is shipped, and lists of your own from a file."""

from __future__ import annotations

import re
from functools import cache
from pathlib import Path
from typing import TYPE_CHECKING, Any

import yaml
from pydantic import (
    BaseModel,
    ConfigDict,
    Field,
    field_serializer,
    field_validator,
    model_validator,
)

from ct_measure_plugin.errors import ArgumentError, MaterialsError, UnknownNameError
from ct_measure_plugin.measurements.written_files import checked, read_written
from ct_measure_plugin.physics.attenuation import Material, mass_attenuation

if TYPE_CHECKING:
    from collections.abc import Sequence
    from typing import Self

__all__ = [
    "SHIPPED",
    "MaterialEntry",
    "find_material",
    "load_materials",
    "materials_from",
    "save_materials",
    "shipped_materials",
]

#: The list that comes with the package.
SHIPPED = Path(__file__).with_name("materials.yaml")

#: What people and napari put behind a name to tell two rods of one material apart.
_COUNTED = re.compile(r"^(.*\S)\s*(?:\[\d+\]|\(\d+\)|[\s#_]\d+)$")


class MaterialEntry(BaseModel):
    """A line of a list of materials.

    Examples
    --------
    >>> entry = MaterialEntry(name="PMMA, batch 7", formula="C5H8O2", density_g_cm3=1.183,
    ...                       density_uncertainty_g_cm3=0.002, source="weighed and measured")
    >>> float(entry.material().hu(70.0).round(1))
    119.5
    """

    model_config = ConfigDict(frozen=True, extra="forbid")

    name: str = Field(min_length=1, max_length=80)
    formula: str | None = None
    weight_fractions: tuple[tuple[str, float], ...] | None = None
    density_g_cm3: float = Field(gt=0, lt=25)
    density_uncertainty_g_cm3: float = Field(ge=0, lt=5)
    source: str = ""
    aliases: tuple[str, ...] = ()

    @field_validator("weight_fractions", mode="before")
    @classmethod
    def _pairs(cls, given: Any) -> Any:
        """Take a mapping, as files have it; kept as pairs, so that a setting can be a key."""
        return tuple(given.items()) if isinstance(given, dict) else given

    @field_serializer("weight_fractions")
    def _mapping(self, pairs: tuple[tuple[str, float], ...] | None) -> dict[str, float] | None:
        return None if pairs is None else dict(pairs)

    @model_validator(mode="after")
    def _one_composition(self) -> Self:
        if (self.formula is None) == (self.weight_fractions is None):
            raise ValueError("must have either a formula or weight_fractions")
        mass_attenuation(self.formula or dict(self.weight_fractions or ()), 60.0)
        return self

    def material(self) -> Material:
        """Return it as physics takes it."""
        return Material(
            self.name,
            self.formula or self.weight_fractions or (),
            self.density_g_cm3,
            self.source,
            self.density_uncertainty_g_cm3,
        )


def materials_from(given: Any) -> tuple[MaterialEntry, ...]:
    """Return a checked list of materials.

    Parameters
    ----------
    given : dict
        ``{"materials": [...]}``, as a file holds it.

    Raises
    ------
    MaterialsError
        With every fault at once, each under its place in the file.

    Examples
    --------
    >>> materials_from({"materials": [{"name": "PMMA", "formula": "C5H8O2",
    ...                                "density_g_cm3": -1, "density_uncertainty_g_cm3": 0}]})
    Traceback (most recent call last):
    ...
    ct_measure_plugin.errors.MaterialsError: materials[0].density_g_cm3: Input should be greater ...
    """
    if not isinstance(given, dict) or set(given) != {"materials"}:
        raise MaterialsError({"materials": "must be the file's one entry, and a list"})
    lines = given["materials"]
    if not isinstance(lines, list) or not lines:
        raise MaterialsError({"materials": "must be a list of at least one material"})
    found: list[MaterialEntry] = []
    problems: dict[str, str] = {}
    taken: dict[str, int] = {}
    for i, line in enumerate(lines):
        entry, faults = checked(MaterialEntry, line, f"materials[{i}]")
        problems.update(faults)
        if entry is None:
            continue
        for name in (entry.name, *entry.aliases):
            first = taken.setdefault(name.casefold(), i)
            if first != i:
                problems[f"materials[{i}].name"] = f"'{name}' is already that of materials[{first}]"
        found.append(entry)
    if problems:
        raise MaterialsError(problems)
    return tuple(found)


def load_materials(path: str | Path) -> tuple[MaterialEntry, ...]:
    """Read a list of materials from a YAML or JSON file.

    Raises
    ------
    MaterialsError
        If the file cannot be read or is no such list.

    Examples
    --------
    >>> [entry.name for entry in load_materials(SHIPPED)][:3]
    ['air', 'water', 'polymethylpentene']
    """
    return materials_from(read_written(path))


@cache
def shipped_materials() -> tuple[MaterialEntry, ...]:
    """Return the list that comes with the package."""
    return load_materials(SHIPPED)


def save_materials(entries: Sequence[MaterialEntry], path: str | Path) -> Path:
    """Write a list of materials as YAML, to be edited and read back."""
    lines = [entry.model_dump(mode="json", exclude_defaults=True) for entry in entries]
    file = Path(path)
    text = yaml.safe_dump({"materials": lines}, sort_keys=False, allow_unicode=True)
    file.write_text(text, encoding="utf-8")
    return file


def find_material(name: str, entries: Sequence[MaterialEntry]) -> Material:
    """Return the material of a name or alias; case does not matter, nor a number behind the name.

    Raises
    ------
    UnknownNameError
        If there is none; the message lists those there are.

    Examples
    --------
    >>> find_material("acrylic [2]", shipped_materials()).name
    'PMMA'
    """
    if not name.strip():
        raise ArgumentError("material", "must be named", name)
    counted = _COUNTED.match(name.strip())
    for wanted in (name.strip(), counted.group(1) if counted else None):
        for entry in entries:
            if wanted and wanted.casefold() in {n.casefold() for n in (entry.name, *entry.aliases)}:
                return entry.material()
    raise UnknownNameError("material", name, tuple(entry.name for entry in entries))
