"""A recipe: everything a simulated series follows from."""

from __future__ import annotations

import hashlib
import math
import re
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.virtual_scanner.detector import Detector
from ct_measure_plugin.virtual_scanner.geometry import Geometry, ParallelBeam
from ct_measure_plugin.virtual_scanner.hardening import Correction, WaterCalibration
from ct_measure_plugin.virtual_scanner.kernels import Kernel
from ct_measure_plugin.virtual_scanner.phantom import WATER, AnyMaterial, Phantom
from ct_measure_plugin.virtual_scanner.reconstruction import Grid
from ct_measure_plugin.virtual_scanner.slice_profile import SliceProfile
from ct_measure_plugin.virtual_scanner.spectrum import Spectrum, monoenergetic

if TYPE_CHECKING:
    from numpy.typing import NDArray

    FloatArray = NDArray[np.float64]

__all__ = ["Recipe"]

_NUMBER = re.compile(r"-?\d+\.\d+(?:e[-+]?\d+)?")


@dataclass(frozen=True, slots=True, kw_only=True)
class Recipe:
    """Phantom, scan and reconstruction of one series.

    Parameters
    ----------
    phantom : Phantom
        What lies in the scanner.
    geometry : ParallelBeam or FanBeam
        Where the rays run.
    spectrum : Spectrum
        Shares of the signal by energy.
    detector : Detector
        Exposure, noise and faults.
    kernel : Kernel
        Reconstruction filter.
    grid : Grid
        Matrix and field of view.
    profile : SliceProfile
        What enters a slice; its width is the slice thickness.
    positions_mm : tuple of float
        z of the slices, increasing. Each slice is a scan of its own with noise of its own, even
        where slices overlap.
    correction : {"water", "none"}
        Beam-hardening correction.
    calibration_path_mm : float
        Water path at which the CT-number scale is set.
    water : Material or TabulatedMaterial
        What the scanner is calibrated on.
    seed : int
        Of the noise; another seed is a repeat scan. The same seed with another kernel or grid
        is another reconstruction of the same raw data.
    title : str
        For people; it must not name a person.

    Examples
    --------
    >>> from ct_measure_plugin.virtual_scanner import Part, disc_rod
    >>> recipe = Recipe(phantom=Phantom((Part(disc_rod((0.0, 0.0), 50.0), WATER),)))
    >>> recipe.digest() == recipe.digest(), len(recipe.digest())
    (True, 64)
    """

    phantom: Phantom
    geometry: Geometry = field(default_factory=ParallelBeam)
    spectrum: Spectrum = field(default_factory=lambda: monoenergetic(70.0))
    detector: Detector = field(default_factory=Detector)
    kernel: Kernel = field(default_factory=Kernel)
    grid: Grid = field(default_factory=Grid)
    profile: SliceProfile = field(default_factory=SliceProfile)
    positions_mm: tuple[float, ...] = (0.0,)
    correction: Correction = "water"
    calibration_path_mm: float = 200.0
    water: AnyMaterial = WATER
    seed: int = 0
    title: str = ""

    def __post_init__(self) -> None:
        if not self.positions_mm or not np.all(np.diff(self.positions_mm) > 0):
            raise ArgumentError("positions_mm", "must increase", self.positions_mm)
        if self.correction not in ("water", "none"):
            raise ArgumentError("correction", "must be 'water' or 'none'", self.correction)
        if self.seed < 0:
            raise ArgumentError("seed", "must not be negative", self.seed)
        if not self.calibration_path_mm > 0:
            raise ArgumentError(
                "calibration_path_mm", "must be greater than 0", self.calibration_path_mm
            )
        self._check_object_fits()

    def _check_object_fits(self) -> None:
        radius = self.geometry.radius_mm
        for z_mm in self.positions_mm:
            for cut in self.phantom.cuts(self.profile, z_mm):
                reach = math.hypot(*cut.section.centre_mm) + cut.section.reach_mm
                if reach > radius:
                    raise ArgumentError(
                        "phantom",
                        f"must lie within the {radius:g} mm circle the detector sees",
                        f"a part reaching {reach:g} mm",
                    )

    @property
    def spacing_mm(self) -> tuple[float, float, float]:
        """Slice distance, row and column spacing; one slice alone counts its thickness."""
        if len(self.positions_mm) > 1:
            gap = (self.positions_mm[-1] - self.positions_mm[0]) / (len(self.positions_mm) - 1)
        else:
            gap = self.profile.width_mm
        return gap, self.grid.pixel_mm, self.grid.pixel_mm

    @property
    def calibration(self) -> WaterCalibration:
        """The scanner's CT-number scale."""
        return WaterCalibration(
            self.spectrum, self.calibration_path_mm, self.correction, self.water
        )

    def digest(self) -> str:
        """Return the SHA-256 of everything in the recipe, hexadecimal.

        Numbers enter with nine digits, so that the last bit of a sine on another machine does
        not make another series of it.
        """
        text = _NUMBER.sub(lambda found: f"{float(found.group()):.9g}", repr(self))
        return hashlib.sha256(text.encode()).hexdigest()
