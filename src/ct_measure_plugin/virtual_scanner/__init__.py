"""A virtual CT scanner whose CT numbers, MTF, NPS and slice profile are known in advance.

What belongs here: phantoms in mm, exact line integrals, the detector with its noise and faults,
the beam-hardening step, filtered backprojection, the truth that follows from a recipe, the sample
volumes and the one file that writes them as DICOM. What it may import: physics, errors, numpy,
scipy; pydicom in ``writer.py`` only. What it must not do: measure anything, know of napari or Qt.

Everything follows from a :class:`~ct_measure_plugin.virtual_scanner.recipe.Recipe`:
``simulate(recipe)`` is a Volume, ``Truth(recipe)`` is what it must measure.
"""

from __future__ import annotations

from ct_measure_plugin.physics.attenuation import Material, material
from ct_measure_plugin.virtual_scanner.detector import Detector
from ct_measure_plugin.virtual_scanner.geometry import FanBeam, ParallelBeam
from ct_measure_plugin.virtual_scanner.kernels import KERNEL_SHAPES, Kernel
from ct_measure_plugin.virtual_scanner.phantom import AIR, WATER, Part, Phantom, TabulatedMaterial
from ct_measure_plugin.virtual_scanner.recipe import Recipe
from ct_measure_plugin.virtual_scanner.reconstruction import Grid, reconstruct
from ct_measure_plugin.virtual_scanner.scanner import simulate, simulate_slice
from ct_measure_plugin.virtual_scanner.sections import Blob, Ellipse, Polygon, box
from ct_measure_plugin.virtual_scanner.slice_profile import SliceProfile
from ct_measure_plugin.virtual_scanner.solids import (
    Bead,
    Leaning,
    Straight,
    block,
    disc_rod,
    elliptic_cylinder,
    ramp_strip,
    tilted_wire,
)
from ct_measure_plugin.virtual_scanner.spectrum import Spectrum, monoenergetic, tube_spectrum
from ct_measure_plugin.virtual_scanner.truth import Truth

__all__ = [
    "AIR",
    "KERNEL_SHAPES",
    "WATER",
    "Bead",
    "Blob",
    "Detector",
    "Ellipse",
    "FanBeam",
    "Grid",
    "Kernel",
    "Leaning",
    "Material",
    "ParallelBeam",
    "Part",
    "Phantom",
    "Polygon",
    "Recipe",
    "SliceProfile",
    "Spectrum",
    "Straight",
    "TabulatedMaterial",
    "Truth",
    "block",
    "box",
    "disc_rod",
    "elliptic_cylinder",
    "material",
    "monoenergetic",
    "ramp_strip",
    "reconstruct",
    "simulate",
    "simulate_slice",
    "tilted_wire",
    "tube_spectrum",
]
