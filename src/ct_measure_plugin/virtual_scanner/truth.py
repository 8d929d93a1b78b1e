"""What a simulated series must measure, from theory; nothing here looks at an image.

The formulas are those of a linear, shift-invariant chain: detector aperture and focal spot, ramp
times window, lookup in the backprojection. Every figure states the bound within which the
simulated images were found to follow it; the tests hold these bounds.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq
from scipy.special import gammaln

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.virtual_scanner.detector import with_scatter
from ct_measure_plugin.virtual_scanner.geometry import FanBeam
from ct_measure_plugin.virtual_scanner.phantom import AIR
from ct_measure_plugin.virtual_scanner.reconstruction import FINE
from ct_measure_plugin.virtual_scanner.scanner import ideal_projection

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    from ct_measure_plugin.virtual_scanner.phantom import AnyMaterial
    from ct_measure_plugin.virtual_scanner.recipe import Recipe

    FloatArray = NDArray[np.float64]

__all__ = ["Truth"]

#: Terms of the polynomial through the readings of water, for the cup.
CUP_TERMS = 8
#: Distances worked out at a time.
MANY = 512


@dataclass(frozen=True)
class Truth:
    """The truth of a recipe.

    Parameters
    ----------
    recipe : Recipe
        What was simulated.

    Notes
    -----
    A pixel holds the reconstructed function at the pixel's centre, not its mean over the pixel:
    the pixel grid adds nothing to the MTF; in the NPS it folds back what lies beyond its Nyquist
    frequency, which :meth:`nps` includes.

    Examples
    --------
    >>> from ct_measure_plugin.virtual_scanner import Kernel, Part, Phantom, Recipe, WATER, disc_rod
    >>> from ct_measure_plugin.virtual_scanner import Grid
    >>> phantom = Phantom((Part(disc_rod((0.0, 0.0), 50.0), WATER),))
    >>> truth = Truth(Recipe(phantom=phantom, grid=Grid(lookup="linear")))
    >>> round(truth.frequency_at(0.5), 4), round(truth.frequency_at(0.1), 4)
    (0.4203, 0.7112)
    """

    recipe: Recipe

    # --- CT numbers -------------------------------------------------------------------------
    @property
    def effective_energy(self) -> float:
        """Energy in keV at which μ of water equals its mean over the calibration beam."""
        return self.recipe.calibration.effective_kev

    def hu(self, material: AnyMaterial) -> float:
        """Return the CT number of a material in HU.

        One energy: by definition. A spectrum: that of a thin piece in the middle of the
        calibration path; :meth:`hu_bound` says how far a real piece may read from it.
        """
        return self.recipe.calibration.thin_insert_hu(material, self.recipe.calibration_path_mm)

    def hu_bound(self, material: AnyMaterial, path_mm: float = 0.0) -> float:
        """Return the bound in HU on the mean of a region well inside a piece, without noise.

        Parameters
        ----------
        material : Material or TabulatedMaterial
            What the piece is made of.
        path_mm : float
            Longest path of a ray through the piece; it matters for a spectrum.

        Returns
        -------
        float
            One energy: 0.2 HU plus 0.1 % of the contrast to water; with the pure ramp, whose
            ripples reach from one piece to the next, 0.1 % of the largest contrast in the
            phantom. A spectrum: also the change of
            the thin piece's CT number over water paths from 1/4 to 5/4 of the calibration path,
            and the change due to the piece's own hardening. Without water correction the scale
            itself bends: also the largest CT number of water over those paths. Infinite with
            scatter.
        """
        recipe, calibration = self.recipe, self.recipe.calibration
        if recipe.detector.scatter_ratio > 0:
            return math.inf
        near = (material,) if recipe.kernel.shape != "ramp" else self._contrasts(material)
        base = 0.2 + 1e-3 * max(abs(self.hu(other)) for other in near)
        if recipe.spectrum.is_mono:
            return base
        paths = np.linspace(0.25, 1.25, 9) * recipe.calibration_path_mm
        numbers = [calibration.thin_insert_hu(material, float(path)) for path in paths]
        spread = max(abs(number - self.hu(material)) for number in numbers)
        bend = 0.0
        if recipe.correction == "none":
            read = calibration.correct(calibration.reading(paths))
            bend = float(np.max(np.abs(calibration.to_hu(read / paths))))
        return base + spread + bend + self._own_hardening(material, path_mm)

    def _contrasts(self, material: AnyMaterial) -> tuple[AnyMaterial, ...]:
        return (material, AIR, *self.recipe.phantom.materials())

    def _own_hardening(self, material: AnyMaterial, path_mm: float) -> float:
        """Return the change of a piece's mean CT number from a thin one to one of `path_mm`."""
        if path_mm <= 0:
            return 0.0
        recipe, calibration = self.recipe, self.recipe.calibration
        energies = np.asarray(recipe.spectrum.energies_kev)
        beam = np.asarray(recipe.spectrum.shares) * np.exp(
            -0.1 * recipe.calibration_path_mm * recipe.water.mu(energies)
        )
        excess = 0.1 * (material.mu(energies) - recipe.water.mu(energies))
        total = -math.log(float(np.sum(beam * np.exp(-excess * path_mm)) / np.sum(beam)))
        thin = float(np.sum(beam * excess) / np.sum(beam))
        return 1000.0 * abs(total / path_mm - thin) / (0.1 * calibration.mu_water)

    def water_cup(self, radius_mm: ArrayLike, cylinder_mm: float) -> FloatArray:
        """Return the CT number at distances from the axis of a water cylinder in air.

        Parameters
        ----------
        radius_mm : array_like
            Distances, smaller than the cylinder's radius.
        cylinder_mm : float
            Its radius.

        Notes
        -----
        The corrected reading behind a path L is a polynomial Σ c_n Lⁿ (fitted); the inverse Radon
        transform of Lⁿ with L = 2√(R²−t²) is 2ⁿ Γ(n/2+1) / (√π Γ(n/2+½)) · (R²−r²)^((n−1)/2).
        Resolution is left out: it matters near the rim. On beam hardening in CT: R. A. Brooks
        and G. Di Chiro, Phys. Med. Biol. 21 (1976) 390 (reference from memory).
        """
        r = np.asarray(radius_mm, dtype=float)
        if not np.all((r >= 0) & (r < cylinder_mm)):
            raise ArgumentError("radius_mm", f"must lie in 0 <= r < {cylinder_mm:g}", radius_mm)
        calibration = self.recipe.calibration
        full = 2.0 * cylinder_mm
        share = 0.5 - 0.5 * np.cos(np.linspace(0.0, np.pi, 65))[1:]
        reading = calibration.correct(calibration.reading(share * full))
        powers = np.arange(1, CUP_TERMS + 1)
        terms, *_ = np.linalg.lstsq(share[:, None] ** powers, reading, rcond=None)
        chord = np.sqrt(1.0 - (r / cylinder_mm) ** 2)  # half the chord across r, over R
        factor = np.exp(gammaln(powers / 2 + 1) - gammaln(powers / 2 + 0.5)) / math.sqrt(math.pi)
        shapes = chord[..., None] ** (powers - 1)
        mu = np.asarray(np.sum(terms * factor * shapes, axis=-1) / cylinder_mm)
        cup: FloatArray = calibration.to_hu(mu)
        return cup

    # --- resolution -------------------------------------------------------------------------
    @property
    def mtf_bound(self) -> float:
        """Bound on |measured − mtf| up to 0.9 of the cut-off, for objects without folding.

        0.01. With linear lookup 0.05: linear interpolation leaves images of the spectrum beyond
        the detector's Nyquist frequency, and the pixel grid folds them back.
        """
        return 0.01 if self.recipe.grid.lookup == "fine" else 0.05

    def mtf(self, frequency_per_mm: ArrayLike) -> FloatArray:
        """Return the in-plane MTF near the isocentre, 1 at frequency 0.

        sinc(f·aperture) · focal spot · A(f) · lookup. In a fan beam it holds near the isocentre
        only: elsewhere aperture and focal spot change their size with the distance from the
        source, and the rebinning interpolates between channels (at a distance t by the fraction
        t³/6D²d of one: 0.05 at 33 mm for D = 500 mm and d = 0.5 mm).
        """
        f = np.abs(np.asarray(frequency_per_mm, dtype=float))
        aperture = np.sinc(f * self.recipe.geometry.width_mm)
        return np.asarray(self._focal(f) * aperture * self._chain(f))

    def folding(self, frequency_per_mm: ArrayLike) -> FloatArray:
        """Return the largest error of the MTF by under-sampling at the detector, in one direction.

        An object with detail beyond the detector's Nyquist frequency, such as a thin wire, has
        it folded back: at f comes what was at 1/d − f, with a phase that depends on where the
        object lies. Averaged over directions most of it cancels. For objects without such
        detail (edges of more than a channel's width of blur, Gaussian points) it is nothing.
        """
        f = np.abs(np.asarray(frequency_per_mm, dtype=float))
        geometry = self.recipe.geometry
        mirror = 1.0 / geometry.pitch_mm - f
        gain = np.sinc(mirror * geometry.width_mm) * self._focal(mirror)
        return np.asarray(np.abs(gain) * self._chain(f))

    def frequency_at(self, level: float) -> float:
        """Return the highest frequency in mm⁻¹ at which the MTF is `level`.

        Raises
        ------
        ArgumentError
            If the MTF never falls to it.
        """
        f = np.linspace(0.0, self.recipe.kernel.cutoff_per_mm, 2001)
        above = np.flatnonzero(self.mtf(f) >= level)
        if not 0 < level < 1 or above.size == 0 or above[-1] == f.size - 1:
            raise ArgumentError("level", "must be a value the MTF falls to", level)
        low, high = float(f[above[-1]]), float(f[above[-1] + 1])
        return float(brentq(lambda x: float(self.mtf(x)) - level, low, high))

    def _focal(self, f: FloatArray) -> FloatArray:
        geometry = self.recipe.geometry
        if geometry.focal_spot_mm == 0:
            return np.ones_like(f)
        scale = 1.0
        if isinstance(geometry, FanBeam):
            scale = 1.0 - geometry.source_mm / geometry.detector_mm
        shifts = {shift for _, shift in geometry.sub_offsets()}
        waves = [np.cos(2.0 * np.pi * f * scale * shift) for shift in sorted(shifts)]
        return np.asarray(np.mean(waves, axis=0))

    def _chain(self, f: FloatArray) -> FloatArray:
        """Return what the reconstruction does to the spectrum, the ramp apart, up to Nyquist."""
        return self.recipe.kernel.window(f) * self._lookup(f)

    def _lookup(self, f: FloatArray) -> FloatArray:
        denser = 1 if self.recipe.grid.lookup == "linear" else FINE
        return np.asarray(np.sinc(f * self.recipe.geometry.pitch_mm / denser) ** 2)

    # --- noise ------------------------------------------------------------------------------
    #: Relative bound on the radial NPS between 2 bins and 0.9 of the cut-off.
    nps_bound = 0.1

    def line_integral_variance(
        self, at_mm: tuple[float, float] = (0.0, 0.0), index: int = 0
    ) -> float:
        """Return the variance of a corrected reading, averaged over the rays through a point.

        Parameters
        ----------
        at_mm : (float, float)
            y, x.
        index : int
            The slice.
        """
        recipe = self.recipe
        quanta = recipe.detector.quanta_in_air(recipe.geometry.width_mm, recipe.profile.width_mm)
        if quanta is None:
            return 0.0
        ideal = ideal_projection(recipe, recipe.positions_mm[index])
        reading = with_scatter(ideal, recipe.detector, recipe.geometry)
        channel = recipe.geometry.channel_of(*at_mm)
        everyone = np.arange(recipe.geometry.channels)
        through = np.array(
            [np.interp(c, everyone, row) for c, row in zip(channel, reading, strict=True)]
        )
        step = 1e-4
        slope = recipe.calibration.correct(through + step) - recipe.calibration.correct(through)
        variance = recipe.detector.variance(through, quanta) * (slope / step) ** 2
        return float(np.mean(variance))

    def _filter(self, f: FloatArray) -> FloatArray:
        """Return K(f): ramp, window and lookup, with the images a linear lookup leaves."""
        pitch = self.recipe.geometry.pitch_mm
        if self.recipe.grid.lookup == "linear":
            folded = np.abs(f - np.rint(f * pitch) / pitch)
        else:
            folded = f
        window = self.recipe.kernel.window(folded)
        return np.asarray(folded * window * self._lookup(f))

    def _noise_density(self, f: FloatArray) -> FloatArray:
        """Return K²/f for unit reading variance, views and pitch factors apart; any f >= 0."""
        return np.divide(self._filter(f) ** 2, f, out=np.zeros_like(f), where=f > 0)

    def nps_2d(
        self,
        fy_per_mm: ArrayLike,
        fx_per_mm: ArrayLike,
        *,
        at_mm: tuple[float, float] = (0.0, 0.0),
        index: int = 0,
    ) -> FloatArray:
        """Return the noise power spectrum near a point of a slice, HU² mm².

        Parameters
        ----------
        fy_per_mm, fx_per_mm : array_like
            Frequencies, broadcast against each other; within the pixel grid's Nyquist range.
        at_mm : (float, float)
            y, x of the point.
        index : int
            The slice.

        Notes
        -----
        S(f) = (π d σ_p²/M) K(f)²/f (1000/μ_w)², with K = f A(f) and the lookup's factor, d the
        pitch, M the views and σ_p² the variance of the readings (S. J. Riederer, N. J. Pelc, D.
        A. Chesler, Phys. Med. Biol. 23, 1978, 446; M. F. Kijewski and P. F. Judy, Phys. Med.
        Biol. 32, 1987, 565, on the folding by the pixel grid; references from memory). σ_p² is
        averaged over the directions: the spectrum is taken as isotropic, which is exact at the
        centre of a round object. Rounding to whole HU adds 1/12 HU² of white noise, included.
        """
        fy, fx = np.broadcast_arrays(
            np.asarray(fy_per_mm, dtype=float), np.asarray(fx_per_mm, dtype=float)
        )
        period = 1.0 / self.recipe.grid.pixel_mm
        reach = self._noise_reach()
        orders = range(-math.ceil(reach / period), math.ceil(reach / period) + 1)
        total = np.zeros(fy.shape)
        for my in orders:
            for mx in orders:
                total += self._noise_density(np.hypot(fy + my * period, fx + mx * period))
        return self._noise_scale(at_mm, index) * total + self.recipe.grid.pixel_mm**2 / 12.0

    def _noise_reach(self) -> float:
        """Return the frequency beyond which noise no longer counts."""
        if self.recipe.grid.lookup == "linear":
            return 3.0 / self.recipe.geometry.pitch_mm
        return self.recipe.kernel.cutoff_per_mm

    def _noise_scale(self, at_mm: tuple[float, float], index: int) -> float:
        recipe = self.recipe
        per_view = math.pi * recipe.geometry.pitch_mm / recipe.geometry.views
        scale = 1000.0 / (0.1 * recipe.calibration.mu_water)
        return per_view * self.line_integral_variance(at_mm, index) * scale**2

    def nps(
        self,
        frequency_per_mm: ArrayLike,
        *,
        at_mm: tuple[float, float] = (0.0, 0.0),
        index: int = 0,
    ) -> FloatArray:
        """Return the radial NPS: :meth:`nps_2d` averaged over directions, HU² mm²."""
        f = np.asarray(frequency_per_mm, dtype=float)
        turn = (np.arange(48) + 0.5) * (0.5 * np.pi / 48)
        fy, fx = f[..., None] * np.sin(turn), f[..., None] * np.cos(turn)
        return np.asarray(self.nps_2d(fy, fx, at_mm=at_mm, index=index).mean(axis=-1))

    def noise_sd(self, at_mm: tuple[float, float] = (0.0, 0.0), index: int = 0) -> float:
        """Return the standard deviation of a pixel in HU: the NPS integrated over the plane.

        Holds within 3 % at the centre of a round object.
        """
        reach = self._noise_reach()
        step = reach / 20000
        f = np.asarray((np.arange(20000) + 0.5) * step, dtype=float)
        ring = 2.0 * np.pi * float(np.sum(f * self._noise_density(f))) * step
        return math.sqrt(self._noise_scale(at_mm, index) * ring + 1.0 / 12.0)

    # --- faults -----------------------------------------------------------------------------
    def rings(self, radius_mm: ArrayLike) -> FloatArray:
        """Return what the gain errors add at distances from the isocentre, HU.

        Parameters
        ----------
        radius_mm : array_like
            Distances, no more than three times the radius every view sees.

        Notes
        -----
        For a whole turn. A channel at t₀ adds −ln(1+ε) to every view; backprojection makes of
        it ½ ∮ q(r cos θ) dθ with q(t) = −ln(1+ε) d ∫ K(f) cos 2πf(t−t₀) df over all f. With a
        spectrum the beam-hardening correction scales it; that is left out. Far from the centre
        the amplitude falls with the square root of the radius.
        """
        r = np.abs(np.asarray(radius_mm, dtype=float))
        if r.size <= MANY:
            return self._rings_at(r)
        step = self.recipe.geometry.pitch_mm / 16  # eight times denser than its detail
        grid = np.arange(float(r.min()), float(r.max()) + 4 * step, step)
        parts = [self._rings_at(part) for part in np.array_split(grid, grid.size // MANY + 1)]
        return np.asarray(CubicSpline(grid, np.concatenate(parts))(r))

    def _rings_at(self, r: FloatArray) -> FloatArray:
        around = np.cos((np.arange(4000) + 0.5) * (np.pi / 4000))
        geometry = self.recipe.geometry
        span, wave = self._filter_wave
        total = np.zeros(r.shape)
        for channel, error in self.recipe.detector.gain_errors:
            place = (channel - 0.5 * (geometry.channels - 1)) * geometry.pitch_mm
            q = np.interp(np.abs(r[..., None] * around - place), span, wave)
            total += -math.log1p(error) * geometry.pitch_mm * np.pi * q.mean(axis=-1)
        return total * 1000.0 / (0.1 * self.recipe.calibration.mu_water)

    @cached_property
    def _filter_wave(self) -> tuple[FloatArray, FloatArray]:
        """Return what one reading becomes along its view: distances in mm, and ∫ K cos 2πft df."""
        geometry = self.recipe.geometry
        step = self._noise_reach() / 1500
        f = np.asarray((np.arange(1500) + 0.5) * step, dtype=float)
        span = np.arange(0.0, 4.0 * geometry.radius_mm, geometry.pitch_mm / 16)
        weights = 2.0 * step * self._filter(f)
        parts = [
            np.cos(2.0 * np.pi * np.outer(part, f)) @ weights
            for part in np.array_split(span, span.size // MANY + 1)
        ]
        return span, np.concatenate(parts)

    # --- along z ----------------------------------------------------------------------------
    def slice_profile(self, z_mm: ArrayLike) -> FloatArray:
        """Return the slice profile relative to its peak, at distances from the slice.

        Exact for straight objects; the sub-slices of leaning ones add their in-plane step of at
        most 0.1 mm.
        """
        return self.recipe.profile.relative(z_mm)

    @property
    def slice_fwhm_mm(self) -> float:
        """Full width at half maximum of the slice profile."""
        return self.recipe.profile.width_mm
