"""What a measured noise power spectrum answers."""

from __future__ import annotations

from dataclasses import dataclass

from ct_measure_plugin.physics.results import Curve, Picture, Quantity, Result

__all__ = ["NoisePower"]


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
