"""A phantom: objects of given materials, one inside another."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, TypeAlias

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.attenuation import Material, material

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.virtual_scanner.sections import Section
    from ct_measure_plugin.virtual_scanner.slice_profile import SliceProfile
    from ct_measure_plugin.virtual_scanner.solids import Solid

    FloatArray = NDArray[np.float64]

__all__ = ["AIR", "WATER", "Cut", "Part", "Phantom", "TabulatedMaterial"]

AIR = material("air")
WATER = material("water")


@dataclass(frozen=True, slots=True)
class TabulatedMaterial:
    """A material given by μ at chosen energies instead of by formula.

    Parameters
    ----------
    name : str
        What people call it.
    energies_kev : tuple of float
        Increasing.
    mu_per_cm : tuple of float
        μ at them; linear in between.
    """

    name: str
    energies_kev: tuple[float, ...]
    mu_per_cm: tuple[float, ...]

    def mu(self, energy_kev: object) -> FloatArray:
        """Return μ in cm⁻¹ at energies in keV."""
        return np.asarray(
            np.interp(np.asarray(energy_kev, dtype=float), self.energies_kev, self.mu_per_cm)
        )


AnyMaterial: TypeAlias = Material | TabulatedMaterial


@dataclass(frozen=True, slots=True)
class Part:
    """An object in a phantom.

    Parameters
    ----------
    solid : Solid
        Its shape.
    material : Material or TabulatedMaterial
        What it is made of.
    inside : Material or TabulatedMaterial
        What it replaces: the material of the object it lies in, air for the outermost. It must
        lie wholly within that object, and parts with the same surroundings must not overlap.
    name : str
        For tables.
    """

    solid: Solid
    material: AnyMaterial
    inside: AnyMaterial = AIR
    name: str = ""


@dataclass(frozen=True, slots=True)
class Cut:
    """What one slice sees of a part: a figure, its share, what it brings and what it replaces."""

    weight: float
    section: Section
    material: AnyMaterial
    inside: AnyMaterial


@dataclass(frozen=True, slots=True)
class Phantom:
    """Parts in a common frame; outermost first.

    Parameters
    ----------
    parts : tuple of Part
        At least one.
    name : str
        For titles.

    Examples
    --------
    >>> from ct_measure_plugin.virtual_scanner.solids import disc_rod
    >>> water = Part(disc_rod((0.0, 0.0), 50.0), WATER)
    >>> rod = Part(disc_rod((0.0, 20.0), 6.0), material("PTFE"), inside=WATER)
    >>> Phantom((water, rod)).material_at(0.0, 0.0, 22.0).name
    'PTFE'
    """

    parts: tuple[Part, ...]
    name: str = ""

    def __post_init__(self) -> None:
        if not self.parts:
            raise ArgumentError("parts", "must hold at least one part", self.parts)

    def cuts(self, profile: SliceProfile, z_mm: float) -> tuple[Cut, ...]:
        """Return what a slice at `z_mm` sees of every part."""
        return tuple(
            Cut(piece.weight, piece.section, part.material, part.inside)
            for part in self.parts
            for piece in part.solid.pieces(profile, z_mm)
        )

    def material_at(self, z_mm: float, y_mm: float, x_mm: float) -> AnyMaterial:
        """Return what fills a point: the last part listed that covers it, else air."""
        found: AnyMaterial = AIR
        for part in self.parts:
            section = part.solid.at(z_mm)
            if section is not None and section.covers(
                np.asarray(y_mm, float), np.asarray(x_mm, float)
            ):
                found = part.material
        return found

    def materials(self) -> tuple[AnyMaterial, ...]:
        """Return the materials in the order of their first part, without repeats."""
        return tuple(dict.fromkeys(part.material for part in self.parts))
