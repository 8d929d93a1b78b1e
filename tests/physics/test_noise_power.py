"""The noise power spectrum against noise whose spectrum is known, and against scipy.signal."""

from __future__ import annotations

import math
from functools import cache

import numpy as np
import pytest
from noise_fields import SPECTRA, cut, field, ramp, white
from scipy import ndimage, signal

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics import noise_power
from ct_measure_plugin.physics.patch_spectra import WINDOWS, window_values
from ct_measure_plugin.physics.results import NotMeasured

SPACING = (0.5, 0.5)


@cache
def patches_of(name: str, count: int, size: int = 64, seed: int = 1) -> np.ndarray:
    """Return patches that share nothing, 196 from each field of 1024² pixels."""
    rng = np.random.default_rng(seed)
    found: list[np.ndarray] = []
    while sum(map(len, found)) < count:
        found.append(
            cut(field(rng, (1024, 1024), SPACING, SPECTRA[name])[:896, :896], size, size)[0]
        )
    return np.concatenate(found)[:count]


def codes(result) -> set[str]:
    return {caution.code for caution in result.cautions}


def usable(result) -> np.ndarray:
    return result.radial.x >= result.lowest_frequency.value - 1e-12


# --- the level -----------------------------------------------------------------------------------


@pytest.mark.parametrize("window", WINDOWS)
@pytest.mark.parametrize("size", [(64, 64), (63, 64), (64, 63), (33, 47)])
def test_white_noise_is_flat_at_its_variance_times_the_pixel_area(size, window):
    """S = σ² dx dy, for odd and even sizes and pixels that are not square; of white noise the share
    that detrending leaves is known."""
    spacing = (0.7, 0.45)
    noise = np.random.default_rng(3).normal(30, 10, (300, *size))
    found = noise_power(noise, spacing_mm=spacing, window=window)
    level = 100 * 0.7 * 0.45
    upper = (found.radial.y / found.retained.y)[usable(found)]
    # 300 patches of over 1,500 pixels fix the mean level to 0.3 %
    assert upper.mean() == pytest.approx(level, rel=0.01)
    z = (upper - level) / found.radial.y_uncertainty[usable(found)]
    assert np.sqrt(np.mean(z**2)) < 1.6  # about 20 rings: their scatter is known to 16 %
    assert found.sd.value == pytest.approx(10, rel=0.005)
    assert found.spectrum.values.shape == size
    assert found.radial.x.max() <= 0.5 / 0.7 * (1 + 1e-12)


@pytest.mark.parametrize("name", SPECTRA)
def test_known_spectra_come_back_within_two_percent_a_bin(name):
    """2,000 patches, unbiased above the bins lost to detrending, where there is any power: above
    1 % of the peak. The bound is 2 %, or three of the bin's own standard uncertainties where
    those are larger (the lowest rings hold few bins)."""
    found = noise_power(patches_of(name, 2000), spacing_mm=SPACING)
    true = SPECTRA[name](found.radial.x)
    kept = usable(found) & (true > 0.01 * true.max())
    error = found.radial.y / true - 1
    bound = np.maximum(0.02, 3 * found.radial.y_uncertainty / true)
    assert np.all(np.abs(error[kept]) < bound[kept]), np.round(100 * error, 1)
    assert abs(error[kept].mean()) < 0.005
    assert np.all(found.radial.y_uncertainty[kept] < 0.02 * true[kept])


def test_without_taking_the_window_s_smear_out_the_steep_end_would_be_biased():
    """The correction is worth having: the plain ring mean of a sharp kernel's noise is off by more
    than 2 % at either end, the corrected one is not."""
    found = noise_power(patches_of("sharp", 2000), spacing_mm=SPACING)
    true = SPECTRA["sharp"](found.radial.x)
    plain = found.radial.y * (1 + found.smear.y) / true - 1
    kept = usable(found) & (true > 0.01 * true.max())
    assert np.abs(plain[kept]).max() > 0.025
    assert np.abs(found.radial.y / true - 1)[kept].max() < 0.02


@pytest.mark.parametrize("name", ["ramp", "sharp"])
def test_small_patches_are_unbiased_to_their_last_ring(name):
    """32 pixels a side, where the window changes the steep end by 6 to 19 %, and mixes into the
    last ring what the Nyquist frequency mirrors. The bound is 3.5 of a ring's own scatter, without
    what the stated uncertainty adds for the smear; dividing it out to second order only leaves 4.6
    of them."""
    found = noise_power(patches_of(name, 6000, size=32), spacing_mm=SPACING)
    true = SPECTRA[name](found.radial.x)
    error = (found.radial.y / true - 1) / np.sqrt(2 / found.degrees_of_freedom.y)
    assert np.abs(error[usable(found)]).max() < 3.5, np.round(error, 1)
    assert np.all(found.radial.y_uncertainty >= found.smear.y**2 * found.radial.y)


def test_patches_too_small_for_a_texture_are_cautioned():
    """16 pixels a side: the window changes the last ring by 18 %."""
    assert "patches-small" in codes(noise_power(patches_of("sharp", 400, 16), spacing_mm=SPACING))
    assert "patches-small" not in codes(noise_power(patches_of("sharp", 200), spacing_mm=SPACING))


def test_noise_in_three_dimensions():
    """S3D of a field with a known spectrum, and its integral over fz, the spectrum of a slice."""
    rng, spacing = np.random.default_rng(4), (0.8, 0.5, 0.5)

    def truth(f):
        return 60.0 * np.exp(-((f / 0.45) ** 2))

    patches = []
    for _ in range(8):
        block = field(rng, (72, 160, 160), spacing, truth)
        for z in range(0, 64, 32):
            for y in range(0, 128, 32):
                for x in range(0, 128, 32):
                    patches.append(block[z : z + 32, y : y + 32, x : x + 32])
    found = noise_power(np.array(patches), spacing_mm=spacing)
    assert found.radial.y_unit == "HU² mm³"
    kept = usable(found) & (found.radial.x < 0.8)
    true = truth(found.radial.x)
    z = ((found.radial.y - true) / found.radial.y_uncertainty)[kept]
    assert np.abs(z).max() < 3.5
    assert found.radial.y[kept] == pytest.approx(true[kept], rel=0.06)
    fz = np.fft.fftfreq(4096, 0.8)
    slice_true = [truth(np.hypot(f, fz)).mean() / 0.8 for f in found.radial.x]
    assert found.slice_radial.y[kept] == pytest.approx(np.array(slice_true)[kept], rel=0.03)
    assert found.slice_radial.y_unit == "HU² mm²"
    # along fz: the integral over the plane, and the variance in the end
    integral = 2 * np.trapezoid(found.through_plane.y, found.through_plane.x)
    assert integral == pytest.approx(found.sd.value**2, rel=1e-6)
    # the Gaussian's integral; fz ends at 0.625 mm⁻¹, the plane where nothing is left
    sigma = math.sqrt(60 * (0.45 * math.sqrt(math.pi)) ** 3 * math.erf(0.625 / 0.45))
    assert found.sd.value == pytest.approx(sigma, rel=0.02)


def test_white_noise_in_three_dimensions():
    noise = np.random.default_rng(5).normal(0, 10, (60, 17, 32, 33))
    found = noise_power(noise, spacing_mm=(1.0, 0.5, 0.5))
    # σ² dx dy dz = 25 HU² mm³; 60 patches fix the mean of the rings to 0.6 %
    assert found.radial.y[usable(found)].mean() == pytest.approx(25, rel=0.02)
    assert found.axial.values[3:-3].mean() == pytest.approx(25, rel=0.01)
    assert found.slice_radial.y[usable(found)].mean() == pytest.approx(25, rel=0.01)  # dz = 1
    assert found.through_plane.y[2:-1] == pytest.approx(100 * 1.0, rel=0.03)


# --- outside references --------------------------------------------------------------------------


@pytest.mark.parametrize("window", WINDOWS)
def test_one_dimension_is_scipys_periodogram(window):
    """scipy.signal.periodogram of each row, in density scaling: the sum of the two-dimensional
    spectrum over fy times its step must be the same curve."""
    noise = np.random.default_rng(6).normal(0, 10, (8, 32, 64))
    taper = window_values(window, 64)
    flat = noise * window_values(window, 32)[:, None]
    f, rows = signal.periodogram(
        flat, fs=1 / 0.5, window=taper, detrend=False, return_onesided=False, scaling="density"
    )
    theirs = rows.sum(axis=1).mean(axis=0) / np.sum(window_values(window, 32) ** 2)
    found = noise_power(noise, spacing_mm=(0.8, 0.5), detrend="none", window=window)
    mine = found.spectrum.values.sum(axis=0) * found.spectrum.spacing[0]
    assert mine == pytest.approx(np.fft.fftshift(theirs), rel=1e-10)
    axis = found.spectrum.origin[1] + found.spectrum.spacing[1] * np.arange(64)
    assert axis == pytest.approx(np.fft.fftshift(f), abs=1e-12)


@pytest.mark.parametrize("shape", [(24, 32), (25, 31)])
def test_two_dimensions_are_scipys_periodogram_twice(shape):
    """scipy.signal.periodogram scales a complex signal along one axis; applied to the transform
    along the other axis it gives the two-dimensional density."""
    noise = np.random.default_rng(7).normal(0, 10, (6, *shape))
    dy, dx = 0.7, 0.5
    wy, wx = window_values("hann", shape[0]), window_values("hann", shape[1])
    along_x = np.fft.fft(noise * wx, axis=2) * math.sqrt(dx / np.sum(wx**2))
    _, theirs = signal.periodogram(
        along_x, fs=1 / dy, window=wy, detrend=False, return_onesided=False, axis=1
    )
    found = noise_power(noise, spacing_mm=(dy, dx), detrend="none")
    assert np.fft.ifftshift(found.spectrum.values) == pytest.approx(theirs.mean(axis=0), rel=1e-10)


def test_overlapping_patches_average_as_welch_does():
    """scipy.signal.welch over one long row, half overlapping, mean taken out of each segment."""
    row = np.random.default_rng(8).normal(0, 10, 64 * 20)
    _, theirs = signal.welch(
        row, fs=2.0, window=window_values("hann", 64), noverlap=32, detrend="constant",
        return_onesided=False,
    )  # fmt: skip
    starts = range(0, len(row) - 63, 32)
    patches = np.stack([np.tile(row[s : s + 64], (8, 1)) for s in starts])
    found = noise_power(patches, spacing_mm=(1.0, 0.5), detrend="mean", window="hann")
    wy = window_values("hann", 8)
    at_zero = found.spectrum.values[4] * np.sum(wy**2) / np.sum(wy) ** 2  # rows repeat: all at fy=0
    assert at_zero == pytest.approx(np.fft.fftshift(theirs), rel=1e-9)


# --- what must hold inside -----------------------------------------------------------------------


@pytest.mark.parametrize("detrend", ["none", "mean", "plane", "quadratic"])
def test_the_integral_is_the_variance(detrend):
    """Parseval, to rounding, without a window."""
    noise = np.random.default_rng(9).normal(7, 3, (5, 20, 31))
    found = noise_power(noise, spacing_mm=(0.7, 0.5), detrend=detrend, window="none")
    integral = found.spectrum.values.sum() * math.prod(found.spectrum.spacing)
    y, x = np.mgrid[-1:1:20j, -1:1:31j].reshape(2, -1)
    terms = {"none": 0, "mean": 1, "plane": 3, "quadratic": 6}[detrend]
    design = np.stack([np.ones(620), x, y, x * x, x * y, y * y], axis=1)[:, :terms]
    flat = noise.reshape(5, -1).T
    rest = flat - design @ np.linalg.lstsq(design, flat, rcond=None)[0] if terms else flat
    assert integral == pytest.approx(np.mean(rest**2), rel=1e-10)
    assert found.sd.value**2 == pytest.approx(integral, rel=1e-12)


@pytest.mark.parametrize(
    ("window", "kept"), [("none", (0.234, 0.907, 0.895)), ("hann", (0.601, 0.845, 0.978))]
)
def test_what_quadratic_detrending_takes_from_white_noise(window, kept):
    """The first bins of white noise keep these shares (projection onto six polynomials, computed
    independently); the result must say so, and the measured bins must show it."""
    noise = np.random.default_rng(10).normal(0, 10, (4000, 64, 64))
    found = noise_power(noise, spacing_mm=SPACING, window=window)
    level = np.fft.ifftshift(found.spectrum.values) / 25
    pairs = [((0, 1), (1, 0)), ((1, 1), (1, -1)), ((0, 2), (2, 0))]
    for bins, share in zip(pairs, kept, strict=True):
        measured = np.mean([level[b] for b in bins])
        assert measured == pytest.approx(share, abs=0.04)  # 8,000 values of χ²₂: 1.1 %
    ring = (kept[0] + kept[1]) / 2  # the first ring holds four bins of either kind
    assert found.retained.y[0] == pytest.approx(ring, abs=0.001)
    lost = {"none": 1, "hann": 2}[window]
    assert found.lowest_frequency.value == found.radial.x[lost]


def test_padding_draws_the_same_curve_finer():
    patches = patches_of("ramp", 200)
    plain = noise_power(patches, spacing_mm=SPACING)
    padded = noise_power(patches, spacing_mm=SPACING, padding=2)
    assert len(padded.radial.x) == 2 * len(plain.radial.x)
    assert padded.sd.value == pytest.approx(plain.sd.value, rel=1e-10)
    kept = usable(plain)
    between = np.interp(plain.radial.x, padded.radial.x, padded.radial.y)
    assert between[kept] == pytest.approx(plain.radial.y[kept], rel=0.05)


def test_directional_cuts_tell_horizontal_from_vertical():
    rng = np.random.default_rng(11)
    smeared = ndimage.gaussian_filter(rng.normal(0, 10, (300, 64, 96)), (0, 0, 1.0))[:, :, 16:80]
    found = noise_power(smeared, spacing_mm=SPACING)
    sigma = 0.5  # mm
    expected = 25 * np.exp(-((2 * np.pi * sigma * found.horizontal.x) ** 2))
    low = (found.horizontal.x > 0.1) & (found.horizontal.x < 0.5)
    assert found.horizontal.y[low] == pytest.approx(expected[low], rel=0.15)
    assert found.vertical.y[3:] == pytest.approx(25, rel=0.15)


# --- figures of the curve ------------------------------------------------------------------------


def test_peak_mean_and_half_power_of_a_ramp_with_a_gaussian():
    """S = f exp(−b²f²), b = 3: peak 1/(√2 b), mean √π/(2b) (closed forms); half power where
    S is half its peak, by bisection."""
    found = noise_power(patches_of("ramp", 400, size=128), spacing_mm=SPACING)
    assert found.peak_frequency.value == pytest.approx(1 / (3 * math.sqrt(2)), rel=0.02)
    assert found.mean_frequency.value == pytest.approx(math.sqrt(math.pi) / 6, rel=0.005)
    f = np.linspace(0, 1, 200001)
    above = f[ramp(f) >= ramp(f).max() / 2]
    assert found.half_power_low.value == pytest.approx(above[0], rel=0.02)
    assert found.half_power_high.value == pytest.approx(above[-1], rel=0.01)
    for quantity, true in (
        (found.peak_frequency, 1 / (3 * math.sqrt(2))),
        (found.mean_frequency, math.sqrt(math.pi) / 6),
    ):
        assert abs(quantity.value - true) < 3 * quantity.uncertainty + 0.002 * true
    assert found.sd.value == pytest.approx(math.sqrt(400 * math.pi**1.5 / (2 * 3**3)), rel=0.005)


def test_white_noise_has_no_half_power_frequency():
    found = noise_power(patches_of("white", 200), spacing_mm=SPACING)
    assert found.half_power_low is None
    assert found.half_power_high is None
    assert found.mean_frequency.value == pytest.approx(0.5, rel=0.02)  # half of 1 mm⁻¹


def test_noise_that_peaks_below_the_lowest_bin_says_so():
    found = noise_power(patches_of("smooth", 200), spacing_mm=SPACING)
    assert "peak-at-end" in codes(found)
    assert "peak-at-end" not in codes(noise_power(patches_of("ramp", 200), spacing_mm=SPACING))


def test_misuse_names_the_argument():
    noise = np.zeros((4, 16, 16))
    with pytest.raises(ArgumentError, match="'patches' must have shape"):
        noise_power(noise[0], spacing_mm=SPACING)
    with pytest.raises(ArgumentError, match="'patches' must be at least 8 pixels"):
        noise_power(noise[:, :4], spacing_mm=SPACING)
    with pytest.raises(ArgumentError, match="'spacing_mm' must hold 2 lengths"):
        noise_power(noise, spacing_mm=(0.5, -0.5))
    with pytest.raises(ArgumentError, match="'detrend' must be one of"):
        noise_power(noise, spacing_mm=SPACING, detrend="cubic")
    with pytest.raises(ArgumentError, match="'window' must be one of"):
        noise_power(noise, spacing_mm=SPACING, window="box")
    with pytest.raises(ArgumentError, match="'corners' must have shape"):
        noise_power(noise, spacing_mm=SPACING, corners=[[0, 0]])
    with pytest.raises(ArgumentError, match="'repeats' must hold at least one"):
        noise_power(white(noise) + np.arange(16), spacing_mm=SPACING, detrend="repeat")


def test_the_answer_to_too_few_patches_is_a_reason():
    found = noise_power(np.random.default_rng(1).normal(size=(3, 16, 16)), spacing_mm=SPACING)
    assert isinstance(found, NotMeasured)
    assert "3 patches; at least 4" in found.reason


def test_values_that_are_no_ct_numbers_are_refused():
    wild = np.random.default_rng(1).normal(0, 1e31, (20, 16, 16))
    found = noise_power(wild, spacing_mm=SPACING)
    assert isinstance(found, NotMeasured)
    assert "far beyond any CT number" in found.reason
