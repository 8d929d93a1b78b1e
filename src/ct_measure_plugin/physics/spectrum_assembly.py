"""From patches of noise to their spectrum and its figures: one measurement, step by step."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
from scipy import fft

from ct_measure_plugin.physics import detrend as trends
from ct_measure_plugin.physics import patch_faults as faults
from ct_measure_plugin.physics.patch_independence import (
    Independence,
    independence_by_order,
    independence_by_place,
    slice_correlation,
)
from ct_measure_plugin.physics.patch_spectra import PatchSpectra, Window, patch_spectra
from ct_measure_plugin.physics.patch_spectra import window_values as window_of
from ct_measure_plugin.physics.radial import Groups, line, rings
from ct_measure_plugin.physics.results import Curve, NotMeasured, Picture, Quantity
from ct_measure_plugin.physics.shared_pixels import places_from_pixels
from ct_measure_plugin.physics.spectrum_cautions import spectrum_cautions
from ct_measure_plugin.physics.spectrum_depth import Depth, depth_kernel, few_slices
from ct_measure_plugin.physics.spectrum_figures import spectrum_figures
from ct_measure_plugin.physics.spectrum_result import NoisePower
from ct_measure_plugin.physics.spectrum_smear import Bins, smear

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.patch_differences import Taken

    Floats = NDArray[np.float64]

__all__ = ["SpectrumTask"]

#: A frequency counts as lost to detrending if it keeps less than this share of white noise.
USABLE_SHARE = 0.9


class SpectrumTask:
    """One measurement on its way from patches to the result."""

    def __init__(
        self,
        taken: Taken,
        spacing_mm: tuple[float, ...],
        detrend: trends.Detrend,
        window: Window,
        padding: int,
        unit: str,
    ) -> None:
        self.taken, self.unit = taken, unit
        self.spacing = tuple(float(s) for s in spacing_mm)
        self.shape = tuple(int(n) for n in taken.patches.shape[1:])
        self.deep = len(self.shape) == 3
        self.degree = trends.DEGREE[detrend]
        self.windows = tuple(window_of(window, n) for n in self.shape)
        self.transform = tuple(int(padding) * n for n in self.shape)
        self.plane = (self.transform[-2], self.transform[-1])
        self.step = (self.spacing[-2], self.spacing[-1])
        self.power_unit = f"{unit}² mm{'³' if self.deep else '²'}"
        self.rings = rings(self.plane, self.step)

    def result(self) -> NoisePower | NotMeasured:
        """Measure, or say why not."""
        found, residuals = self._spectra()
        samples = self._samples(found)
        if self.degree >= 0 and (fault := faults.structure(found, samples)) is not None:
            return fault
        independence = self._independence(found, residuals, samples)
        if self.deep and (fault := few_slices(found.power, self.shape[0])) is not None:
            return fault
        return self._assembled(found, independence, samples)

    def _spectra(self) -> tuple[PatchSpectra, Floats | None]:
        corners = self.taken.corners
        several = corners is not None and not self.deep and int(np.ptp(corners[:, 0])) > 0
        n = len(self.taken.patches)
        keep = np.empty((n, math.prod(self.shape)), np.float32) if several else None
        found = patch_spectra(
            self.taken.patches,  # type: ignore[arg-type] # read block by block into floats
            spacing_mm=self.spacing,
            degree=self.degree,
            windows=self.windows,
            transform=self.transform,
            groups=self.rings,
            keep=keep,  # type: ignore[arg-type] # single precision is enough for a correlation
        )
        return found, keep  # type: ignore[return-value]

    def _samples(self, found: PatchSpectra) -> float:
        """Return the independent samples in a patch's variance, σ⁴ A / ∫ S² df."""
        power = found.power
        n = len(self.taken.patches)
        chance = 1.0 + 1.0 / n  # the square of an estimate is high by its own scatter
        volume = math.prod(self.shape) / math.prod(self.transform)
        return float(power.sum() ** 2 / np.sum(power**2)) * chance * volume

    def _independence(
        self, found: PatchSpectra, residuals: Floats | None, samples: float
    ) -> Independence:
        corners = self.taken.corners
        if corners is None:
            corners = places_from_pixels(self.taken.patches)
        if corners is None:
            return independence_by_order(found.ring_power, self.windows, self.transform)
        slice_power = np.ones(1)
        if residuals is not None:
            slice_power = slice_correlation(residuals, corners, samples) ** 2
        return independence_by_place(corners, self.windows, self.transform, slice_power)

    # --- the parts of the result ----------------------------------------------------------------

    def _assembled(
        self, found: PatchSpectra, independence: Independence, samples: float
    ) -> NoisePower:
        power = found.power * self.taken.factor
        flat = power[0] if self.deep else power
        common = self.taken.factor_doubt**2
        scatter = self.rings.scatter(independence.kernel) + common
        measured, dof = self._curve(self.rings, flat, scatter)
        kept = self._retained()
        usable = self._usable(kept)
        smeared = self._smear(measured, usable)
        radial = _without(measured, smeared.y)
        figures = spectrum_figures(radial.x, radial.y, usable, scatter)
        sd, pixel_sd, trend = self._spreads(found, power, independence)
        cautions = spectrum_cautions(
            self.taken,
            found,
            independence,
            samples,
            radial=radial,
            smear=smeared,
            trend=trend.value,
            at_end=figures.at_end,
        )
        result = NoisePower(
            spectrum=self._picture(flat),
            radial=radial,
            horizontal=self._along(1, flat, independence, common),
            vertical=self._along(0, flat, independence, common),
            degrees_of_freedom=Curve(
                radial.x, dof, None, "frequency", "mm⁻¹", "degrees of freedom", ""
            ),
            retained=kept,
            smear=smeared,
            lowest_frequency=Quantity(float(radial.x[usable][0]), "mm⁻¹", 0.0),
            peak_frequency=figures.peak,
            mean_frequency=figures.mean,
            half_power_low=figures.half_low,
            half_power_high=figures.half_high,
            sd=sd,
            pixel_sd=pixel_sd,
            trend_share=trend,
            patches=Quantity(float(len(self.taken.patches)), "", 0.0),
            independent_patches=Quantity(independence.independent, "", 0.0),
            cautions=cautions,
        )
        if not self.deep:
            return result
        depth = Depth(self.spacing, self.windows[0], self.unit)
        return replace(
            result,
            slice_radial=depth.slice_radial(power, self.rings, scatter),
            through_plane=depth.through_plane(power, independence.kernel),
            axial=depth.axial(power, self.rings),
        )

    def _curve(self, groups: Groups, flat: Floats, scatter: Floats) -> tuple[Curve, Floats]:
        dof = 2.0 / np.diag(scatter)
        y = groups.mean(flat)
        few = np.maximum(dof, 4.5)  # the standard deviation has no limit at 4
        doubt = y * few / (few - 2.0) * np.sqrt(2.0 / (few - 4.0))
        curve = Curve(groups.frequency, y, doubt, "frequency", "mm⁻¹", "NPS", self.power_unit)
        return curve, dof

    def _along(self, axis: int, flat: Floats, independence: Independence, common: float) -> Curve:
        groups = line(self.plane, self.step, axis)
        return self._curve(groups, flat, groups.scatter(independence.kernel) + common)[0]

    def _picture(self, flat: Floats) -> Picture:
        fy, fx = (
            np.asarray(fft.fftshift(fft.fftfreq(n, d)))
            for n, d in zip(self.plane, self.step, strict=True)
        )
        return Picture(
            np.asarray(fft.fftshift(flat)),
            (float(fy[1] - fy[0]), float(fx[1] - fx[0])),
            ("fy", "fx"),
            ("mm⁻¹", "mm⁻¹"),
            self.power_unit,
            (float(fy[0]), float(fx[0])),
        )

    def _retained(self) -> Curve:
        window = self.windows[0]
        for other in self.windows[1:]:
            window = window[..., None] * other
        share = trends.retained_share(self.shape, self.degree, window, self.transform)
        kept = self.rings.mean(share[0] if self.deep else share)
        return Curve(
            self.rings.frequency, kept, None, "frequency", "mm⁻¹", "share kept by detrending", ""
        )

    def _usable(self, kept: Curve) -> NDArray[np.bool_]:
        """Tell which rings neither detrending nor its leakage through the window reaches."""
        emptied = {-1: 0, 0: 0}.get(self.degree, 1)  # the last bin that detrending empties
        lobe = 0 if self.windows[-1][0] == 1.0 else 1  # and how far the window spreads that
        step = max(1.0 / (n * d) for n, d in zip(self.shape[-2:], self.step, strict=True))
        reach = (emptied + lobe + 0.5) * step if self.degree >= 0 else 0.0
        usable = (kept.y >= USABLE_SHARE) & (kept.x >= reach)
        return usable if usable.any() else np.arange(len(kept.x)) == len(kept.x) - 1

    def _smear(self, measured: Curve, usable: NDArray[np.bool_]) -> Curve:
        shape = (self.shape[-2], self.shape[-1])
        bins = Bins.of(self.rings, shape, self.plane, self.step)
        windows = (self.windows[-2], self.windows[-1])
        found = smear(measured.x, measured.y, usable, windows, bins)
        return Curve(measured.x, found, None, "frequency", "mm⁻¹", "smear of the window", "")

    def _spreads(
        self, found: PatchSpectra, power: Floats, independence: Independence
    ) -> tuple[Quantity, Quantity, Quantity]:
        """Return SD from the spectrum, SD of the pixels, and the share taken by detrending."""
        kernel = independence.kernel
        if self.deep:
            depth = depth_kernel(self.windows[0], self.transform[0])
            kernel = depth[:, None, None] * kernel
        mixed = fft.ifftn(fft.fftn(power) * fft.fftn(kernel)).real
        chance = 1.0 + float(independence.kernel[0, 0])
        relative = 2.0 * float(np.sum(power * mixed)) / float(power.sum()) ** 2 / chance
        relative += self.taken.factor_doubt**2
        extent = math.prod(m * d for m, d in zip(self.transform, self.spacing, strict=True))
        sd = math.sqrt(float(power.sum()) / extent)
        raw = float(found.raw_variance.mean()) * self.taken.factor
        after = float(found.variance.mean()) * self.taken.factor
        taken = 100.0 * (1.0 - after / raw) if raw > 0 and self.degree >= 0 else 0.0
        doubt = math.sqrt(relative) / 2.0
        return (
            Quantity(sd, self.unit, sd * doubt),
            Quantity(math.sqrt(raw), self.unit, math.sqrt(raw) * doubt),
            Quantity(taken, "%", 0.0),
        )


def _without(curve: Curve, smeared: Floats) -> Curve:
    """Return a curve without its smear; the square of that is what its model leaves uncertain."""
    y = curve.y / (1.0 + smeared)
    doubt = curve.y_uncertainty
    if doubt is not None:
        doubt = np.hypot(doubt / (1.0 + smeared), y * smeared**2)
    return replace(curve, y=y, y_uncertainty=doubt)
