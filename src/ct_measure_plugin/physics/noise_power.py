"""The noise power spectrum of a set of patches, with what is uncertain about it."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from scipy import fft

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics import detrend as trends
from ct_measure_plugin.physics import patch_faults as faults
from ct_measure_plugin.physics.patch_differences import FEWEST_PATCHES, Taken, subtracted
from ct_measure_plugin.physics.patch_independence import (
    Independence,
    independence_by_order,
    independence_by_place,
    slice_correlation,
)
from ct_measure_plugin.physics.patch_spectra import WINDOWS, PatchSpectra, Window, patch_spectra
from ct_measure_plugin.physics.patch_spectra import window_values as window_of
from ct_measure_plugin.physics.radial import Groups, line, rings
from ct_measure_plugin.physics.results import Caution, Curve, NotMeasured, Picture, Quantity, Result
from ct_measure_plugin.physics.shared_pixels import places_from_pixels
from ct_measure_plugin.physics.spectrum_depth import Depth, depth_kernel, few_slices
from ct_measure_plugin.physics.spectrum_figures import SpectrumFigures, spectrum_figures
from ct_measure_plugin.physics.spectrum_smear import smear, window_moment

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]
    Whole = NDArray[np.intp]

__all__ = ["NoisePower", "noise_power"]

#: Shorter sides leave hardly a frequency that detrending does not touch.
SHORTEST_SIDE = 8

#: A frequency counts as lost to detrending if it keeps less than this share of white noise.
USABLE_SHARE = 0.9


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class NoisePower(Result):
    """A noise power spectrum.

    Attributes
    ----------
    spectrum : Picture
        NPS over (fy, fx), frequency 0 in the middle; of deep patches the plane fz = 0, in
        unit² mm³.
    radial : Curve
        Its mean over rings of frequency, with the standard uncertainty of each; the smear of the
        window is divided out.
    horizontal, vertical : Curve
        Along fx and along fy, each a mean over three lines of bins.
    degrees_of_freedom : Curve
        Of each ring: the ring's mean is distributed as χ² over this number, with it as parameter.
    retained : Curve
        Share of white noise that detrending leaves in each ring.
    smear : Curve
        By how much window and ring width raise each ring, as a share; `radial` is divided by one
        plus it. `spectrum` is as measured.
    lowest_frequency : Quantity
        The first usable ring; those below are lost to detrending, or the window mixes lost bins
        into them.
    peak_frequency, mean_frequency : Quantity
        Of the radial curve: where it is largest, and ∫ f S df / ∫ S df.
    half_power_low, half_power_high : Quantity or None
        Where the curve falls to half its peak below and above it; None where it does not.
    sd : Quantity
        Square root of the spectrum's integral.
    pixel_sd : Quantity
        Standard deviation of the patches' pixels before detrending, for comparison.
    trend_share : Quantity
        Share of the pixels' variance that detrending took away, in percent.
    patches, independent_patches : Quantity
        How many patches there are, and how many that share no noise would tell as much.
    slice_radial : Curve or None
        Deep patches: ∫ NPS dfz over rings, the spectrum of a single slice, in unit² mm².
    through_plane : Curve or None
        Deep patches: ∬ NPS dfx dfy along fz, in unit² mm.
    axial : Picture or None
        Deep patches: NPS over (fz, in-plane ring).
    """

    spectrum: Picture
    radial: Curve
    horizontal: Curve
    vertical: Curve
    degrees_of_freedom: Curve
    retained: Curve
    smear: Curve
    lowest_frequency: Quantity
    peak_frequency: Quantity
    mean_frequency: Quantity
    half_power_low: Quantity | None = None
    half_power_high: Quantity | None = None
    sd: Quantity
    pixel_sd: Quantity
    trend_share: Quantity
    patches: Quantity
    independent_patches: Quantity
    slice_radial: Curve | None = None
    through_plane: Curve | None = None
    axial: Picture | None = None


def noise_power(
    patches: ArrayLike,
    *,
    spacing_mm: tuple[float, ...],
    detrend: trends.Detrend = "quadratic",
    window: Window = "hann",
    corners: ArrayLike | None = None,
    repeats: Sequence[ArrayLike] = (),
    padding: int = 1,
    unit: str = "HU",
) -> NoisePower | NotMeasured:
    """Return the noise power spectrum of patches of an image or a volume.

    Parameters
    ----------
    patches : array, shape (n, ny, nx) or (n, nz, ny, nx)
        CT numbers of equal patches of uniform material.
    spacing_mm : tuple of float
        (dy, dx), or (dz, dy, dx) for deep patches.
    detrend : {"none", "mean", "plane", "quadratic", "repeat", "slices"}
        What is taken out of each patch: a polynomial, or what repeat scans or neighbouring slices
        share (their difference, with its factor put right, and then its mean).
    window : {"none", "hann", "hamming", "cosine"}
        Taper along each axis; the power it takes is given back.
    corners : array of int, shape (n, 3) or (n, 2), optional
        Slice, row and column of each patch's first pixel. They tell which patches share pixels or
        slices. Without them, overlaps are recognised by the pixels shared, and slices that are
        correlated by the patches' spectra in the order given.
    repeats : sequence of arrays of the patches' shape
        The same patches in further scans, for ``detrend="repeat"``.
    padding : int
        Length of the transform in patch lengths; more than 1 draws the curve finer and adds no
        knowledge.
    unit : str
        Unit of the values.

    Returns
    -------
    NoisePower or NotMeasured
        NotMeasured if the patches are too few, hold structure or clipped values, or their slices
        are too correlated for what is asked.

    Raises
    ------
    ArgumentError
        On misuse.

    Notes
    -----
    ``NPS(f) = dx dy / Σw² · ⟨|Σ w ΔI exp(−2πi f·x)|²⟩``, in unit² mm² (mm³ with dz), whose
    integral over all frequencies is the variance [1]_, [2]_. A ring's mean has a relative variance
    of twice the double sum of κ over the ring's bins (see `patch_independence`), ν = 2 over it
    degrees of freedom, and the stated uncertainty is the standard deviation of the true value given
    the measured one, S ν/(ν − 2) √(2/(ν − 4)), which is S √(2/ν) for large ν.

    Examples
    --------
    >>> noise = np.random.default_rng(1).normal(0, 10, (200, 64, 64))
    >>> found = noise_power(noise, spacing_mm=(0.5, 0.5))
    >>> bool(abs(found.radial.y[5:].mean() - 25.0) < 0.2)  # σ² dx dy
    True
    >>> found.radial.y_unit, found.spectrum.values.shape
    ('HU² mm²', (64, 64))

    References
    ----------
    .. [1] J. H. Siewerdsen, I. A. Cunningham, D. A. Jaffray, Med. Phys. 29 (2002) 2655.
    .. [2] S. J. Riederer, N. J. Pelc, D. A. Chesler, Phys. Med. Biol. 23 (1978) 446.
    """
    data = _checked(patches, spacing_mm, window, padding)
    if detrend not in trends.DETRENDS:
        raise ArgumentError("detrend", f"must be one of {', '.join(trends.DETRENDS)}", detrend)
    place = _corners(corners, data)
    for scan in (data, *map(np.asarray, repeats)):
        if len(scan) == 0:
            break
        if (fault := faults.bad_values(scan)) is not None:
            return fault
    taken = subtracted(data, place, repeats, detrend)
    if isinstance(taken, NotMeasured):
        return taken
    if len(taken.patches) < FEWEST_PATCHES:
        return NotMeasured(
            f"there are {len(taken.patches)} patches; at least {FEWEST_PATCHES} are needed",
            "lay more patches, in more slices, or smaller ones",
        )
    task = _Task(taken, spacing_mm, detrend, window, padding, unit)
    return task.result()


def _divided(curve: Curve, by: Floats) -> Curve:
    doubt = None if curve.y_uncertainty is None else curve.y_uncertainty / by
    return replace(curve, y=curve.y / by, y_uncertainty=doubt)


def _checked(
    patches: ArrayLike, spacing_mm: tuple[float, ...], window: str, padding: int
) -> NDArray[np.generic]:
    data = np.asarray(patches)
    if data.ndim not in (3, 4) or data.dtype.kind not in "iufb":
        raise ArgumentError("patches", "must have shape (n, ny, nx) or (n, nz, ny, nx)", data.shape)
    if data.dtype.kind == "b" or min(data.shape[-2:]) < SHORTEST_SIDE:
        raise ArgumentError(
            "patches", f"must be at least {SHORTEST_SIDE} pixels along each side", data.shape
        )
    if len(spacing_mm) != data.ndim - 1 or not all(0 < s < math.inf for s in spacing_mm):
        raise ArgumentError(
            "spacing_mm", f"must hold {data.ndim - 1} lengths greater than 0", spacing_mm
        )
    if window not in WINDOWS:
        raise ArgumentError("window", f"must be one of {', '.join(WINDOWS)}", window)
    if int(padding) != padding or not 1 <= padding <= 8:
        raise ArgumentError("padding", "must be a whole number from 1 to 8", padding)
    return data


def _corners(corners: ArrayLike | None, data: NDArray[np.generic]) -> Whole | None:
    if corners is None:
        return None
    place = np.asarray(corners)
    if place.ndim != 2 or place.shape[0] != len(data) or place.shape[1] not in (2, 3):
        raise ArgumentError(
            "corners", f"must have shape ({len(data)}, 3) or ({len(data)}, 2)", place.shape
        )
    if place.dtype.kind not in "iu":
        raise ArgumentError("corners", "must hold whole numbers", str(place.dtype))
    if place.shape[1] == 2:
        place = np.column_stack([np.zeros(len(place), int), place])
    return place.astype(np.intp)


class _Task:
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
        radial = _divided(measured, 1.0 + smeared.y)
        figures = spectrum_figures(radial.x, radial.y, usable, scatter)
        sd, pixel_sd, trend = self._spreads(found, power, independence)
        cautions = self._cautions(found, independence, samples, figures, radial, trend)
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
        moments = [window_moment(w, d) for w, d in zip(self.windows[-2:], self.step, strict=True)]
        width = max(1.0 / (n * d) for n, d in zip(self.plane, self.step, strict=True))
        found = smear(measured.x, measured.y, usable, sum(moments) / 2.0, width)
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

    def _cautions(
        self,
        found: PatchSpectra,
        independence: Independence,
        samples: float,
        figures: SpectrumFigures,
        radial: Curve,
        trend: Quantity,
    ) -> tuple[Caution, ...]:
        corners = self.taken.corners
        slices = None if corners is None else corners[:, 0]
        notes = [*self.taken.cautions, *faults.stationarity(found.variance, samples, slices)]
        doubt = radial.y if radial.y_uncertainty is None else radial.y_uncertainty
        relative = float(np.median(doubt / radial.y))
        if relative > 0.1:
            notes.append(
                Caution(
                    "few-patches",
                    f"The radial curve is uncertain by {100 * relative:.0f} % in its middle bin.",
                    "Lay more patches, in more slices.",
                )
            )
        if independence.shared():
            notes.append(
                Caution(
                    "patches-share-noise",
                    f"The {independence.patches} patches overlap or lie in correlated slices; they"
                    f" are worth {independence.independent:.3g} separate ones, and the"
                    " uncertainties say so.",
                )
            )
        if trend.value > 5.0:
            notes.append(
                Caution(
                    "trend-removed",
                    f"Detrending took {trend.value:.1f} % of the variance: a slow trend, or noise"
                    " at the lowest frequencies.",
                    "A repeat scan tells the two apart.",
                )
            )
        if figures.at_end:
            notes.append(
                Caution(
                    "peak-at-end",
                    "The spectrum is largest at the end of its usable range; its peak may lie"
                    " beyond.",
                )
            )
        return tuple(notes)
